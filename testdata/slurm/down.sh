#!/bin/bash
# usage: down.sh DIR    ends the jobs, then the daemons, that up.sh DIR has started
set -u
dir=$1
export SLURM_CONF=$dir/slurm.conf
running=no
for p in $(cat "$dir"/run/*.pid 2>/dev/null); do
  if kill -0 "$p" 2>/dev/null; then running=yes; fi
done
if [ "$running" = no ]; then exit 0; fi
timeout 10 scancel --state=PENDING 2>/dev/null
timeout 10 scancel --state=RUNNING 2>/dev/null
for _ in $(seq 50); do
  if [ -z "$(timeout 5 squeue -h -o %i 2>/dev/null)" ]; then break; fi
  sleep 0.2
done
for p in $(cat "$dir"/run/*.pid 2>/dev/null); do
  kill -TERM "$p" 2>/dev/null
  for _ in $(seq 50); do # bounded: a process that nobody has reaped looks alive
    kill -0 "$p" 2>/dev/null || break
    sleep 0.1
  done
  if kill -0 "$p" 2>/dev/null; then kill -KILL "$p" 2>/dev/null; fi
done
exit 0

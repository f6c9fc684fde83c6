#!/bin/bash
# usage: up.sh DIR [NODES]    starts a throw-away Slurm on loopback, all of it under DIR
#
# DIR is an absolute path, made anew: a kept state would bring old jobs back. One
# controller and NODES (4) nodes of one processor on free ports of 127.0.0.1, without
# authentication, as root: for tests only. It is the Slurm of Debian 12 (slurmctld,
# slurmd, slurm-client, munge). Prints what a shell needs: export SLURM_CONF=...
# Start the controller again with: slurmctld -f "$SLURM_CONF"
set -euo pipefail
dir=$1
nodes=${2:-4}
umask 022
if [ -e "$dir" ]; then
  echo "$dir exists; want a new folder" >&2
  exit 2
fi
mkdir -p "$dir"/{state,spool,log,run}

# A base with free ports behind it, below those that the kernel hands out.
taken() { (exec 3<>"/dev/tcp/127.0.0.1/$1") 2>/dev/null; }
for _ in $(seq 50); do
  base=$((20000 + RANDOM % 12000))
  free=yes
  for p in $(seq "$base" $((base + nodes))); do
    if taken "$p"; then free=no; fi
  done
  if [ "$free" = yes ]; then break; fi
done

export SLURM_CONF=$dir/slurm.conf
{
  cat <<CONF
ClusterName=test
SlurmctldHost=localhost(127.0.0.1)
SlurmUser=root
SlurmdUser=root
AuthType=auth/none
CredType=cred/none
CommunicationParameters=NoInAddrAny,NoCtldInAddrAny
SlurmctldPort=$base
StateSaveLocation=$dir/state
SlurmdSpoolDir=$dir/spool/%n
SlurmctldPidFile=$dir/run/slurmctld.pid
SlurmdPidFile=$dir/run/slurmd.%n.pid
SlurmctldLogFile=$dir/log/slurmctld.log
SlurmdLogFile=$dir/log/slurmd.%n.log
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/none
AccountingStorageType=accounting_storage/none
JobCompType=jobcomp/none
SelectType=select/cons_tres
SelectTypeParameters=CR_Core
SchedulerType=sched/backfill
SchedulerParameters=batch_sched_delay=0,sched_interval=1,bf_interval=1
MpiDefault=none
SwitchType=switch/none
ReturnToService=2
JobRequeue=1
MailProg=/bin/true
MinJobAge=3600
MaxArraySize=8
SlurmdTimeout=10
SlurmctldTimeout=10
KillWait=2
CONF
  for i in $(seq "$nodes"); do
    echo "NodeName=n$i NodeHostname=localhost NodeAddr=127.0.0.1 Port=$((base + i)) CPUs=1 RealMemory=4000 State=UNKNOWN"
  done
  echo "PartitionName=test Nodes=ALL Default=YES MaxTime=INFINITE State=UP"
} >"$SLURM_CONF"

# The daemons must not hold the caller's pipes open.
/usr/sbin/slurmctld -f "$SLURM_CONF" </dev/null >/dev/null 2>&1
for i in $(seq "$nodes"); do
  /usr/sbin/slurmd -f "$SLURM_CONF" -N "n$i" </dev/null >/dev/null 2>&1
done
for _ in $(seq 150); do
  if [ "$(timeout 5 sinfo -h -t idle -o %D 2>/dev/null)" = "$nodes" ]; then
    echo "export SLURM_CONF=$SLURM_CONF"
    exit 0
  fi
  sleep 0.2
done
echo "Slurm did not come up; $dir/log has:" >&2
tail -n 20 "$dir"/log/*.log >&2
exit 1

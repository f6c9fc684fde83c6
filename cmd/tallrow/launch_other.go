//go:build !linux

package main

import (
	"os"
	"os/exec"
)

func setApart(*exec.Cmd) {}

func lockFile(*os.File) bool { return true }

//go:build unix

package outlet

import (
	"os/exec"
	"syscall"
)

// endAll lets the end of the program's time end all that it started, too.
func endAll(c *exec.Cmd) {
	c.SysProcAttr = &syscall.SysProcAttr{Setpgid: true}
	c.Cancel = func() error { return syscall.Kill(-c.Process.Pid, syscall.SIGKILL) }
}

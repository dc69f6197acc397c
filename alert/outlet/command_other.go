//go:build !unix

package outlet

import "os/exec"

// endAll leaves it at the end of the program itself.
func endAll(*exec.Cmd) {}

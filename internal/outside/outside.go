// Package outside runs reference programs that tests compare with. Where a
// program is missing the test is skipped, except in CI (environment variable
// CI=true), where it fails: an outside check must not vanish unseen.
package outside

import (
	"bytes"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

// python is Debian's interpreter, the one for which test.sh installs numpy,
// scipy and astropy; another one earlier on PATH may lack them.
const python = "/usr/bin/python3"

// Python runs a script, given as source text, and returns its standard output.
// The script finds args in sys.argv[1:].
func Python(t testing.TB, script string, args ...string) []byte {
	t.Helper()
	file := filepath.Join(t.TempDir(), "reference.py")
	if err := os.WriteFile(file, []byte(script), 0o644); err != nil {
		t.Fatal(err)
	}
	return Command(t, python, append([]string{file}, args...)...)
}

// Command runs a reference program and returns its standard output. A program
// that exits with an error fails the test with what it said.
func Command(t testing.TB, name string, args ...string) []byte {
	t.Helper()
	if _, err := exec.LookPath(name); err != nil {
		if os.Getenv("CI") == "true" {
			t.Fatalf("reference program %s is not installed: test.sh must install it", name)
		}
		t.Skipf("reference program %s is not installed; run ./test.sh as root to install it", name)
	}
	var stdout, stderr bytes.Buffer
	cmd := exec.Command(name, args...)
	cmd.Stdout, cmd.Stderr = &stdout, &stderr
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s %v: %v\n%s%s", name, args, err, stdout.String(), stderr.String())
	}
	return stdout.Bytes()
}

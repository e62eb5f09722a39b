package published

import (
	"bytes"
	"os/exec"
	"testing"
)

// The live check against SciPy and statsmodels on a few cases of each quantity; .ci/run takes two hundred.
func TestCrosscheck(t *testing.T) {
	if testing.Short() {
		t.Skip("starts a Python with libraries")
	}
	python := ""
	for _, p := range []string{"/usr/bin/python3", "python3"} { // Debian's first: its packages are not for others
		if exec.Command(p, "-c", "import scipy, statsmodels").Run() == nil {
			python = p
			break
		}
	}
	if python == "" {
		t.Skip("skipped: no Python with SciPy and statsmodels here, random cases were not checked against them; apt-get install python3-scipy python3-statsmodels")
	}
	var lines, fault bytes.Buffer
	ours := exec.Command("go", "run", "./crosscheck", "-cases", "20")
	ours.Dir, ours.Stdout, ours.Stderr = folder, &lines, &fault
	if err := ours.Run(); err != nil {
		t.Fatalf("%v\n%s", err, &fault)
	}
	theirs := exec.Command(python, "crosscheck.py")
	theirs.Dir, theirs.Stdin = folder, &lines
	out, err := theirs.CombinedOutput()
	if err != nil {
		t.Errorf("%v\n%s", err, out)
	}
	t.Logf("\n%s", out)
}

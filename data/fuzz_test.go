package data

import (
	"bytes"
	"errors"
	"strings"
	"testing"
)

// checkParseError fails unless err is a ParseError of one line that says where.
func checkParseError(t *testing.T, err error, file string) {
	t.Helper()
	var e *ParseError
	if !errors.As(err, &e) {
		t.Fatalf("%T: %v", err, err)
	}
	if text := err.Error(); strings.ContainsAny(text, "\n\r\x00\x1b") || !strings.HasPrefix(text, file) {
		t.Fatalf("no error of one line about %s: %q", file, text)
	}
}

func FuzzReadRig(f *testing.F) {
	for _, s := range []string{hoverPuck, "", "[log]\ninput='u'\noutput='y'\nsample_period=1e-3\n", "log.input = 'u'\nlog = 3", "[log]\nx.y.z=1\n[[spec]]\n",
		"[limits]\ninput=[nan,inf]\noutput=[1,[2]]", "name=\"\"\"\na\n\"\"\"\nlog={input='a',output=\"b\"}\n", "[loop]\nsample_period=1_0\nhold=1979-05-27\n"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		g, err := ReadRig(bytes.NewReader(text), "rig.toml")
		if err != nil {
			checkParseError(t, err, "rig.toml: ")
			return
		}
		if err := g.Validate(); err != nil {
			t.Fatalf("read, but not valid: %v", err)
		}
		for _, err := range []error{g.NeedLog(), g.NeedDesign()} {
			if err != nil {
				checkParseError(t, err, "rig.toml: ")
			}
		}
	})
}

func FuzzReadLog(f *testing.F) {
	plain := newPlainLog(70).csv()
	for _, s := range []string{plain, strings.ReplaceAll(strings.ReplaceAll(plain, ",", ";"), ".", ","), strings.ReplaceAll(plain, ",", " "),
		"# t u y r\n" + strings.SplitN(plain, "\n", 2)[1], "\xef\xbb\xbf\"t\",\"u\",y\r\ns,A,\"m\"\"m\"\r\n2025-12-17T20:58:11.7Z,1,2\r\n2025-12-17T20:58:11.8Z,,NaN\r\n",
		"t,u,y\r1,2,3\r2,3,4", "1764512345678901234;1;2\n1764512345678901235;3;4\n", "\x1f\x8b\x08\x00", "t;u;y;\n23:59:59;1e999;0x1;\n", "%\n\n,,,\n\"\n"} {
		f.Add([]byte(s), false)
		f.Add([]byte(s), true)
	}
	f.Fuzz(func(t *testing.T, text []byte, named bool) {
		g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y"}, Limits: Limits{Input: &[2]float64{-1, 1}, Output: &[2]float64{-2, 2}, InputRate: 1}}
		if !named {
			g.Log = LogColumns{Input: "c2", Output: "c3", SamplePeriod: 0.5, InputRow: InputBefore}
		}
		exp, err := ReadLog(bytes.NewReader(text), "log.csv", g)
		if err != nil {
			checkParseError(t, err, "log.csv: ")
		} else {
			checkExperiment(t, exp)
			again, err := ReadLog(bytes.NewReader(text), "log.csv", g)
			if err != nil || again.Used != exp.Used || again.SHA256 != exp.SHA256 {
				t.Fatal("read twice, it differs")
			}
		}
		if _, err := Header(bytes.NewReader(text), "log.csv"); err != nil {
			checkParseError(t, err, "log.csv: ")
		}
	})
}

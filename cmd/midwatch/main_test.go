package main

import (
	"os"
	"testing"
	"time"

	"github.com/rogpeppe/go-internal/testscript"

	"midwatch/configs"
)

// asMain makes a test binary behave as the program, for tests that must kill it;
// with the value hurried at the pace of tests.
const (
	asMain  = "MIDWATCH_TEST_AS_MAIN"
	hurried = "hurried"
)

func TestMain(m *testing.M) {
	if as := os.Getenv(asMain); as != "" {
		if as != hurried {
			os.Exit(Main())
		}
		testOnlySettle = -1
		// Data time runs far faster here than any plant's.
		testOnlyAdjust = func(c *configs.Config) { c.Keep.Flush = 20 * time.Millisecond }
		os.Exit(Main())
	}
	testscript.Main(m, map[string]func(){"midwatch": main})
}

// Every verb, as a person would call it.
func TestVerbs(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir: "testdata/script",
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			"await": await,
			"same":  same,
		},
		RequireExplicitExec: true,
	})
}

// await waits until a file is there: await FILE.
func await(ts *testscript.TestScript, neg bool, args []string) {
	if len(args) != 1 || neg {
		ts.Fatalf("usage: await FILE")
	}
	path := ts.MkAbs(args[0])
	for deadline := time.Now().Add(hang); time.Now().Before(deadline); time.Sleep(5 * time.Millisecond) {
		if _, err := os.Stat(path); err == nil {
			return
		}
	}
	ts.Fatalf("%s did not come", args[0])
}

// same says whether two files hold the same bytes: same A B.
func same(ts *testscript.TestScript, neg bool, args []string) {
	if len(args) != 2 {
		ts.Fatalf("usage: same A B")
	}
	a, b := ts.ReadFile(args[0]), ts.ReadFile(args[1])
	if (a == b) == neg {
		ts.Fatalf("%s and %s: same is %v", args[0], args[1], a == b)
	}
}

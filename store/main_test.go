package store

import (
	"fmt"
	"os"
	"testing"

	"go.uber.org/goleak"
)

// childEnv makes the test program play the child of a test: "write" fills a
// folder until it is killed, "check" checks a file.
const childEnv = "MIDWATCH_STORE_CHILD"

func TestMain(m *testing.M) {
	switch os.Getenv(childEnv) {
	case "write":
		childWrite(os.Args[len(os.Args)-1])
		os.Exit(1)
	case "check":
		if err := CheckAlone(os.Args[len(os.Args)-1]); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	goleak.VerifyTestMain(m)
}

package demo

import (
	"fmt"
	"os"
	"testing"
)

// keptFolder holds the stores that reading tests share.
var keptFolder string

func TestMain(m *testing.M) {
	var err error
	if keptFolder, err = os.MkdirTemp("", "ostervane"); err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
	status := m.Run()
	for _, k := range keptOf {
		if k.place == nil {
			continue
		}
		if err := k.place.Close(); err != nil {
			fmt.Fprintln(os.Stderr, err)
			status = 1
		}
	}
	if err := os.RemoveAll(keptFolder); err != nil {
		fmt.Fprintln(os.Stderr, err)
		status = 1
	}
	os.Exit(status)
}

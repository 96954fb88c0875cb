// Command vulndb lets govulncheck run where the public vulnerability database
// cannot be reached, and turns what it finds into a pass or a failure.
//
//	vulndb build -module golang.org/x/vulndb@VERSION -sum h1:… -out DIR
//
// downloads the module that the database is published from, checks its hash,
// and lays its OSV entries out under DIR as `govulncheck -db file://DIR`
// expects them (https://go.dev/doc/security/vuln/database).
//
//	vulndb check -db DIR -allow FILE < findings.json
//
// reads the output of `govulncheck -format json`. A vulnerable symbol that the
// program can reach fails the check unless FILE lists its ID with a reason, and
// so does a listed ID that is no longer found: a list of excuses must not
// outlive them. The exception is a fault of the standard library that the
// running toolchain has fixed, for the list serves older toolchains too.
//
// Exit status: 0 passed, 1 failed, 2 wrong usage.
package main

import (
	"flag"
	"fmt"
	"io"
	"os"
)

func main() {
	os.Exit(run(os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

func run(args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	if len(args) == 0 {
		fmt.Fprintln(stderr, "usage: vulndb build|check …")
		return 2
	}
	flags := flag.NewFlagSet("vulndb "+args[0], flag.ContinueOnError)
	flags.SetOutput(stderr)
	var err error
	switch args[0] {
	case "build":
		module := flags.String("module", "", "`path@version` of the database's module")
		sum := flags.String("sum", "", "its expected `h1:` hash, as in go.sum")
		out := flags.String("out", "", "`directory` to write the database to")
		if flags.Parse(args[1:]) != nil {
			return 2
		}
		err = build(*module, *sum, *out, stdout)
	case "check":
		db := flags.String("db", "", "`directory` of the database")
		allow := flags.String("allow", "", "`file` of accepted IDs with their reasons")
		if flags.Parse(args[1:]) != nil {
			return 2
		}
		err = check(*db, *allow, stdin, stdout)
	default:
		fmt.Fprintf(stderr, "vulndb: found %q, expected build or check\n", args[0])
		return 2
	}
	if err != nil {
		fmt.Fprintf(stderr, "vulndb %s: %v\n", args[0], err)
		return 1
	}
	return 0
}

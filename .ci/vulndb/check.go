package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"go/version"
	"io"
	"maps"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
)

// findings is the part of `govulncheck -format json` that decides.
type findings struct {
	goVersion string            // as govulncheck saw it: go1.26.8
	reached   map[string]string // ID → one line: which symbol, of which module
	scanned   bool              // the stream held a configuration, so a scan ran
}

var idPattern = regexp.MustCompile(`^GO-[0-9]{4}-[0-9]{4,}$`)

func check(db, allowFile string, in io.Reader, log io.Writer) error {
	if db == "" || allowFile == "" {
		return errors.New("-db and -allow are both needed")
	}
	text, err := os.ReadFile(allowFile)
	if err != nil {
		return err
	}
	allowed, err := parseAllow(string(text))
	if err != nil {
		return fmt.Errorf("%s: %w", allowFile, err)
	}
	found, err := readFindings(in)
	if err != nil {
		return fmt.Errorf("read findings: %w", err)
	}
	if !found.scanned {
		return errors.New("read findings: found no scan, expected the output of govulncheck -format json")
	}
	var faults []string
	for _, id := range slices.Sorted(maps.Keys(found.reached)) {
		if reason, ok := allowed[id]; ok {
			fmt.Fprintf(log, "vulndb: %s accepted: %s\n", id, reason)
		} else {
			faults = append(faults, fmt.Sprintf("%s is reached and not listed: %s", id, found.reached[id]))
		}
	}
	for _, id := range slices.Sorted(maps.Keys(allowed)) {
		if _, ok := found.reached[id]; ok {
			continue
		}
		fixed, err := fixedByToolchain(db, id, found.goVersion)
		switch {
		case err != nil:
			faults = append(faults, fmt.Sprintf("%s is listed, but %v", id, err))
		case fixed:
			fmt.Fprintf(log, "vulndb: %s is fixed in %s\n", id, found.goVersion)
		default:
			faults = append(faults, fmt.Sprintf("%s is listed and no longer found: take it off the list", id))
		}
	}
	if len(faults) > 0 {
		return fmt.Errorf("%d to settle:\n  %s", len(faults), strings.Join(faults, "\n  "))
	}
	fmt.Fprintf(log, "vulndb: nothing reached beyond %d listed\n", len(allowed))
	return nil
}

// parseAllow reads lines of an ID and a reason; # starts a comment line.
func parseAllow(text string) (map[string]string, error) {
	allowed := map[string]string{}
	for i, line := range strings.Split(text, "\n") {
		line = strings.TrimSpace(line)
		if line == "" || strings.HasPrefix(line, "#") {
			continue
		}
		id, reason, _ := strings.Cut(line, " ")
		reason = strings.TrimSpace(reason)
		switch {
		case !idPattern.MatchString(id):
			return nil, fmt.Errorf("line %d: found %q, expected an ID such as GO-2026-0001", i+1, id)
		case reason == "":
			return nil, fmt.Errorf("line %d: %s: found no reason, expected one after the ID", i+1, id)
		case allowed[id] != "":
			return nil, fmt.Errorf("line %d: %s is listed twice", i+1, id)
		}
		allowed[id] = reason
	}
	return allowed, nil
}

// readFindings keeps the findings whose vulnerable symbol the program reaches;
// govulncheck also reports modules and packages that are merely there.
func readFindings(in io.Reader) (findings, error) {
	found := findings{reached: map[string]string{}}
	decoder := json.NewDecoder(in)
	for {
		var message struct {
			Config *struct {
				GoVersion string `json:"go_version"`
			} `json:"config"`
			Finding *struct {
				OSV          string `json:"osv"`
				FixedVersion string `json:"fixed_version"`
				Trace        []struct {
					Module   string `json:"module"`
					Version  string `json:"version"`
					Package  string `json:"package"`
					Receiver string `json:"receiver"`
					Function string `json:"function"`
				} `json:"trace"`
			} `json:"finding"`
		}
		if err := decoder.Decode(&message); err == io.EOF {
			return found, nil
		} else if err != nil {
			return found, err
		}
		if message.Config != nil {
			found.scanned, found.goVersion = true, message.Config.GoVersion
		}
		f := message.Finding
		if f == nil || len(f.Trace) == 0 || f.Trace[0].Function == "" {
			continue
		}
		at := f.Trace[0]
		symbol := at.Function
		if at.Receiver != "" {
			symbol = at.Receiver + "." + symbol
		}
		line := fmt.Sprintf("%s.%s of %s %s", at.Package, symbol, at.Module, at.Version)
		if f.FixedVersion != "" {
			line += ", fixed in " + f.FixedVersion
		} else {
			line += ", no fixed version"
		}
		if old, ok := found.reached[f.OSV]; !ok || line < old {
			found.reached[f.OSV] = line
		}
	}
}

// fixedByToolchain tells whether the entry is a fault of the standard library
// or the go command that this version of Go no longer has.
func fixedByToolchain(db, id, goVersion string) (bool, error) {
	text, err := os.ReadFile(filepath.Join(db, "ID", id+".json"))
	if errors.Is(err, os.ErrNotExist) {
		return false, errors.New("the database does not know it")
	} else if err != nil {
		return false, err
	}
	var e entry
	if err := json.Unmarshal(text, &e); err != nil {
		return false, err
	}
	of := false
	for _, a := range e.Affected {
		if a.Package.Name != "stdlib" && a.Package.Name != "toolchain" {
			continue
		}
		of = true
		for _, r := range a.Ranges {
			affected := false
			for _, event := range r.Events { // ordered by version, as OSV asks
				switch {
				case event.Introduced == "0", event.Introduced != "" && version.Compare(goVersion, goVersionOf(event.Introduced)) >= 0:
					affected = true
				case event.Fixed != "" && version.Compare(goVersion, goVersionOf(event.Fixed)) >= 0:
					affected = false
				}
			}
			if affected {
				return false, nil
			}
		}
	}
	return of, nil
}

// goVersionOf turns OSV's semantic version into Go's own writing:
// 1.26.9 → go1.26.9, 1.27.0-rc.2 → go1.27rc2, 1.27.0-0 → go1.27, which sorts
// before every release candidate.
func goVersionOf(semantic string) string {
	base, pre, isPre := strings.Cut(semantic, "-")
	if !isPre {
		return "go" + base
	}
	return "go" + strings.TrimSuffix(base, ".0") + strings.TrimPrefix(strings.ReplaceAll(pre, ".", ""), "0")
}

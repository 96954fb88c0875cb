package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"time"
)

// entry is what the indexes and the check need of one OSV file.
type entry struct {
	ID        string     `json:"id"`
	Modified  time.Time  `json:"modified"`
	Withdrawn *time.Time `json:"withdrawn"`
	Aliases   []string   `json:"aliases"`
	Affected  []struct {
		Package struct {
			Name string `json:"name"`
		} `json:"package"`
		Ranges []struct {
			Events []struct {
				Introduced string `json:"introduced"`
				Fixed      string `json:"fixed"`
			} `json:"events"`
		} `json:"ranges"`
	} `json:"affected"`
}

// The three index files of the database's published layout.
type (
	dbIndex struct {
		Modified time.Time `json:"modified"`
	}
	moduleIndex struct {
		Path  string       `json:"path"`
		Vulns []moduleVuln `json:"vulns"`
	}
	moduleVuln struct {
		ID       string    `json:"id"`
		Modified time.Time `json:"modified"`
	}
	vulnIndex struct {
		ID       string    `json:"id"`
		Modified time.Time `json:"modified"`
		Aliases  []string  `json:"aliases,omitempty"`
	}
)

func build(module, sum, out string, log io.Writer) error {
	if module == "" || sum == "" || out == "" {
		return errors.New("-module, -sum and -out are all needed")
	}
	dir, err := download(module, sum)
	if err != nil {
		return err
	}
	n, err := layOut(filepath.Join(dir, "data", "osv"), out)
	if err != nil {
		return err
	}
	fmt.Fprintf(log, "vulndb: %d entries of %s\n", n, module)
	return nil
}

// download fetches the module into the module cache and answers with its
// folder. The hash is compared here because the module is in no go.sum.
func download(module, sum string) (string, error) {
	cmd := exec.Command("go", "mod", "download", "-json", module)
	cmd.Dir = os.TempDir() // outside the module, whose go.sum it must not touch
	cmd.Stderr = os.Stderr
	text, runErr := cmd.Output()
	var answer struct{ Dir, Sum, Error string }
	if err := json.Unmarshal(text, &answer); err != nil {
		return "", fmt.Errorf("download %s: %w", module, errors.Join(runErr, err))
	}
	if answer.Error != "" {
		return "", fmt.Errorf("download %s: %s", module, answer.Error)
	}
	if answer.Sum != sum {
		return "", fmt.Errorf("download %s: found hash %s, expected %s", module, answer.Sum, sum)
	}
	return answer.Dir, nil
}

// layOut writes the entries of osv and their indexes under out, and counts
// them. Withdrawn entries are left out.
func layOut(osv, out string) (int, error) {
	files, err := filepath.Glob(filepath.Join(osv, "*.json"))
	if err != nil {
		return 0, err
	}
	if len(files) == 0 {
		return 0, fmt.Errorf("%s: found no entries", osv)
	}
	for _, dir := range []string{"ID", "index"} {
		if err := os.MkdirAll(filepath.Join(out, dir), 0o755); err != nil {
			return 0, err
		}
	}
	var newest time.Time
	var vulns []vulnIndex
	modules := map[string][]moduleVuln{}
	for _, file := range files {
		text, err := os.ReadFile(file)
		if err != nil {
			return 0, err
		}
		var e entry
		if err := json.Unmarshal(text, &e); err != nil {
			return 0, fmt.Errorf("%s: %w", file, err)
		}
		if want := strings.TrimSuffix(filepath.Base(file), ".json"); e.ID != want {
			return 0, fmt.Errorf("%s: found id %q, expected %q", file, e.ID, want)
		}
		if e.Withdrawn != nil {
			continue
		}
		if err := os.WriteFile(filepath.Join(out, "ID", e.ID+".json"), text, 0o644); err != nil {
			return 0, err
		}
		if e.Modified.After(newest) {
			newest = e.Modified
		}
		vulns = append(vulns, vulnIndex{e.ID, e.Modified, e.Aliases})
		named := map[string]bool{}
		for _, a := range e.Affected {
			if name := a.Package.Name; !named[name] {
				named[name] = true
				modules[name] = append(modules[name], moduleVuln{e.ID, e.Modified})
			}
		}
	}
	var byModule []moduleIndex
	for path, list := range modules {
		byModule = append(byModule, moduleIndex{path, list})
	}
	slices.SortFunc(byModule, func(a, b moduleIndex) int { return strings.Compare(a.Path, b.Path) })
	for name, value := range map[string]any{"db": dbIndex{newest}, "modules": byModule, "vulns": vulns} {
		text, err := json.Marshal(value)
		if err != nil {
			return 0, err
		}
		if err := os.WriteFile(filepath.Join(out, "index", name+".json"), text, 0o644); err != nil {
			return 0, err
		}
	}
	return len(vulns), nil
}

package main

import (
	"context"
	"runtime"
	"runtime/debug"

	"github.com/spf13/cobra"

	"deltamoor/calib"
)

// A versionAnswer says which program this is. What the build did not record is null.
type versionAnswer struct {
	Version  string  `json:"version"`
	Revision *string `json:"revision"`
	// Modified tells that the sources differed from the revision.
	Modified *bool   `json:"modified"`
	Time     *string `json:"time"`
	Go       string  `json:"go"`
	Platform string  `json:"platform"`
	Engine   string  `json:"engine"`
}

func (p *program) buildVersion(cmd *cobra.Command) {
	cmd.Long = `Say which program this is: the version of the module, the revision and the Go
that built it, and the number of the engine that new fits use. Stored fits name
the engine that made them and are recomputed by that one.`
	cmd.Args = arguments()
	cmd.RunE = p.action(func(context.Context, *cobra.Command, []string) error {
		answer := version()
		if p.json {
			return p.printJSON(answer)
		}
		revision := "not recorded by the build"
		if answer.Revision != nil {
			revision = *answer.Revision
			if answer.Modified != nil && *answer.Modified {
				revision += ", with changes"
			}
			if answer.Time != nil {
				revision += ", " + *answer.Time
			}
		}
		return printPairs(p.stdout,
			"deltamoor", answer.Version,
			"revision", revision,
			"go", answer.Go+" "+answer.Platform,
			"engine", answer.Engine)
	})
}

func version() versionAnswer {
	answer := versionAnswer{
		Version:  "(devel)",
		Go:       runtime.Version(),
		Platform: runtime.GOOS + "/" + runtime.GOARCH,
		Engine:   calib.EngineNumber,
	}
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return answer
	}
	if info.Main.Version != "" {
		answer.Version = info.Main.Version
	}
	for _, s := range info.Settings {
		switch s.Key {
		case "vcs.revision":
			answer.Revision = &s.Value
		case "vcs.time":
			answer.Time = &s.Value
		case "vcs.modified":
			modified := s.Value == "true"
			answer.Modified = &modified
		}
	}
	return answer
}

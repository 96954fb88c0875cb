package main

import (
	"fmt"
	"net"
	"net/url"
	"os"
	"slices"
	"strconv"
	"strings"

	"github.com/knadh/koanf/parsers/toml/v2"
	"github.com/knadh/koanf/providers/confmap"
	"github.com/knadh/koanf/providers/env/v2"
	"github.com/knadh/koanf/providers/rawbytes"
	"github.com/knadh/koanf/v2"
	"github.com/spf13/cobra"
)

// A config is what a command that opens the registry was told, checked.
type config struct {
	// Data is the folder of the embedded database and of the key.
	Data string `koanf:"data"`
	// Database is the address of a shared Postgres; "" means the embedded one under Data.
	Database string `koanf:"database"`
	// Listen is where serve answers, as host:port.
	Listen string `koanf:"listen"`
	// Token says who writes; "" for nobody.
	Token string `koanf:"token"`
}

// A setting can be given as a flag, as a variable and in the file, under one
// name: --listen, DELTAMOOR_LISTEN, listen.
type setting struct {
	name, standard, help string
	// expected describes what the check wants, and accepts tells whether it got it.
	expected string
	accepts  func(string) bool
	// secret values are never repeated in a complaint.
	secret bool
}

func settings() []setting {
	return []setting{
		{name: "data", standard: "deltamoor-data", help: "`folder` of the embedded database and the signing key",
			expected: "the path of a folder", accepts: func(s string) bool { return s != "" }},
		{name: "database", help: "`address` of a shared Postgres, instead of the embedded database",
			expected: "an address such as postgres://user@host/name", accepts: isPostgres, secret: true},
		{name: "listen", standard: "127.0.0.1:8080", help: "`host:port` to answer on",
			expected: "host:port, such as 127.0.0.1:8080", accepts: isListen},
		{name: "token", help: "`token` of the person who writes",
			expected: "a token without spaces", accepts: func(s string) bool { return !strings.ContainsAny(s, " \t\r\n") }, secret: true},
	}
}

const (
	variablePrefix = "DELTAMOOR_"
	configVariable = variablePrefix + "CONFIG"
)

// settingFlags adds the flags of the named settings to a command. The other
// settings stay readable from variables and the file.
func settingFlags(cmd *cobra.Command, names ...string) {
	for _, s := range settings() {
		if slices.Contains(names, s.name) {
			cmd.Flags().String(s.name, s.standard, s.help)
		}
	}
}

// readConfig puts the settings together: standards, then the file, then the
// variables, then the flags that were given; the last word counts. Every fault
// is wrong usage and names where it stands.
func (p *program) readConfig(cmd *cobra.Command) (config, error) {
	all := koanf.New(".")
	origins := map[string]string{}
	take := func(layer *koanf.Koanf, origin func(name string) string) error {
		for _, name := range layer.Keys() {
			origins[name] = origin(name)
		}
		return all.Merge(layer)
	}

	standards := map[string]any{}
	for _, s := range settings() {
		standards[s.name] = s.standard
	}
	if err := all.Load(confmap.Provider(standards, "."), nil); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}

	file, named := p.config, "--config"
	if file == "" {
		file, named = lookup(p.env, configVariable), configVariable
	}
	if file != "" {
		layer, err := readConfigFile(file)
		if err != nil {
			return config{}, usagef("%s: %v", named, err)
		}
		if err := take(layer, func(name string) string { return file + ": " + name }); err != nil {
			return config{}, fmt.Errorf("read settings: %w", err)
		}
	}

	// Variables of other names are not refused: whoever runs containers may set
	// some that begin with a service's name.
	variables := koanf.New(".")
	if err := variables.Load(env.Provider(".", env.Opt{
		Prefix:      variablePrefix,
		EnvironFunc: func() []string { return p.env },
		TransformFunc: func(key, value string) (string, any) {
			name := strings.ToLower(strings.TrimPrefix(key, variablePrefix))
			if !isSetting(name) || value == "" {
				return "", nil
			}
			return name, value
		},
	}), nil); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}
	if err := take(variables, func(name string) string { return variablePrefix + strings.ToUpper(name) }); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}

	given := map[string]any{}
	for _, s := range settings() {
		if f := cmd.Flags().Lookup(s.name); f != nil && f.Changed {
			given[s.name] = f.Value.String()
		}
	}
	flags := koanf.New(".")
	if err := flags.Load(confmap.Provider(given, "."), nil); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}
	if err := take(flags, func(name string) string { return "--" + name }); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}

	for _, s := range settings() {
		value := all.String(s.name)
		if value == s.standard || s.accepts(value) {
			continue
		}
		found := strconv.Quote(value)
		if s.secret {
			found = "something else"
		}
		return config{}, usagef("%s: found %s, expected %s", origins[s.name], found, s.expected)
	}
	var c config
	if err := all.Unmarshal("", &c); err != nil {
		return config{}, fmt.Errorf("read settings: %w", err)
	}
	return c, nil
}

// readConfigFile reads a TOML file of settings and refuses what it does not know.
func readConfigFile(file string) (*koanf.Koanf, error) {
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	layer := koanf.New(".")
	if err := layer.Load(rawbytes.Provider(text), toml.Parser()); err != nil {
		return nil, fmt.Errorf("%s: %w", file, err)
	}
	var unknown []string
	for _, name := range layer.Keys() { // sorted
		if !isSetting(name) {
			unknown = append(unknown, strconv.Quote(name))
		} else if value, ok := layer.Get(name).(string); !ok {
			return nil, fmt.Errorf("%s: %s: found %v, expected a text in quotes", file, name, layer.Get(name))
		} else if value == "" {
			return nil, fmt.Errorf("%s: %s: found an empty text, expected a value or no such line", file, name)
		}
	}
	if len(unknown) > 0 {
		var known []string
		for _, s := range settings() {
			known = append(known, s.name)
		}
		return nil, fmt.Errorf("%s: found %s, expected only %s", file, strings.Join(unknown, ", "), strings.Join(known, ", "))
	}
	return layer, nil
}

func isSetting(name string) bool {
	return slices.ContainsFunc(settings(), func(s setting) bool { return s.name == name })
}

// lookup finds a variable among NAME=value texts; the last one counts, as in os.Environ.
func lookup(env []string, name string) string {
	value := ""
	for _, entry := range env {
		if v, ok := strings.CutPrefix(entry, name+"="); ok {
			value = v
		}
	}
	return value
}

func isPostgres(s string) bool {
	u, err := url.Parse(s)
	return err == nil && (u.Scheme == "postgres" || u.Scheme == "postgresql")
}

func isListen(s string) bool {
	_, port, err := net.SplitHostPort(s)
	if err != nil {
		return false
	}
	n, err := strconv.Atoi(port)
	return err == nil && n >= 0 && n <= 65535
}

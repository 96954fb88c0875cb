package calib

import (
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
)

// Every flag has a case that raises it and the plain session, which raises none
// of them.
func TestFlags(t *testing.T) {
	for _, c := range []struct {
		code   string
		change func(*Session, *Model, *Policy)
	}{
		{"single_anchor", func(s *Session, m *Model, _ *Policy) {
			s.Anchors, s.Readings = s.Anchors[:1], []Reading{s.Readings[0], s.Readings[3], s.Readings[6]}
			m.AllowSingleAnchor = true
		}},
		{"two_anchors", func(s *Session, _ *Model, _ *Policy) {
			s.Anchors, s.Readings = s.Anchors[:2], []Reading{s.Readings[0], s.Readings[1], s.Readings[3], s.Readings[6]}
		}},
		{"few_anchors", func(_ *Session, _ *Model, p *Policy) { p.MinimumAnchors = 4 }},
		{"anchors_close", func(_ *Session, _ *Model, p *Policy) { p.AdvisedSpan = 80 }},
		{"anchor_is_control", func(s *Session, _ *Model, _ *Policy) { s.read("A", Control, -30, 0.05).at(3).sized(5) }},
		{"anchor_disagrees", func(s *Session, _ *Model, _ *Policy) { s.Anchors[1].Value.Value = 0.6 }},
		{"chi_square", func(s *Session, _ *Model, _ *Policy) { s.Anchors[1].Value.Value = 0.6 }},
		{"lack_of_fit", func(s *Session, m *Model, _ *Policy) { s.Anchors[1].Value.Value = 2; m.Weights = WeightsReplicate }},
		{"few_degrees_of_freedom", func(_ *Session, m *Model, _ *Policy) { m.Weights = WeightsReplicate }},
		{"weak_slope", func(s *Session, _ *Model, _ *Policy) {
			for i := range s.Readings {
				u := 6.0
				s.Readings[i].StandardUncertainty = &u
			}
		}},
		{"reading_disagrees", func(s *Session, _ *Model, _ *Policy) { s.Readings[3].Raw += 0.4 }},
		{"no_predecessor", func(_ *Session, m *Model, _ *Policy) { m.Memory = MemoryCarryover }},
		{"unbracketed", func(s *Session, _ *Model, _ *Policy) { s.read("P2", Sample, -5, 0.05).at(9).sized(5) }},
		{"size_range", func(s *Session, _ *Model, _ *Policy) { s.read("P2", Sample, -5, 0.05).at(3).sized(50) }},
		{"preparation_variance_unknown", func(s *Session, m *Model, _ *Policy) {
			m.Weights = WeightsReplicate
			s.read("P2", Sample, -5, 0.05).at(3).sized(5).of("p")
			s.read("P2", Sample, -5, 0.05).at(4).sized(5).of("p")
		}},
		{"extrapolation", func(s *Session, _ *Model, _ *Policy) { s.read("P2", Sample, -60, 0.05).at(3).sized(5) }},
		{"slope_drift", func(s *Session, _ *Model, _ *Policy) {
			for i := range s.Readings {
				if s.Readings[i].Subject == "A" {
					s.Readings[i].Raw -= 0.2 * *s.Readings[i].Time
				}
			}
		}},
		{"term_missing", func(s *Session, _ *Model, _ *Policy) {
			for i := range s.Readings {
				s.Readings[i].Raw += 0.2 * *s.Readings[i].Time
			}
		}},
		{"replicate_scatter", func(s *Session, _ *Model, _ *Policy) { s.read("P1", Sample, -9, 0.05).at(3).sized(5) }},
	} {
		t.Run(c.code, func(t *testing.T) {
			if f := mustFit(t, plain(), Model{}, Policy{}).flagged(c.code); f != nil {
				t.Fatalf("the plain session raises it: %+v", f)
			}
			s, m, p := plain(), Model{}, Policy{}
			c.change(&s, &m, &p)
			r := mustFit(t, s, m, p)
			f := r.flagged(c.code)
			if f == nil {
				t.Fatalf("not raised among %v", r.Flags)
			}
			if !strings.HasSuffix(f.Message, ".") || !strings.HasSuffix(f.Advice, ".") {
				t.Errorf("message %q and advice %q, want a sentence each", f.Message, f.Advice)
			}
			if f.Severity != Note && f.Severity != Warning && f.Severity != Serious {
				t.Errorf("severity %q", f.Severity)
			}
		})
	}
}

func TestSubjectsCarryTheirFlags(t *testing.T) {
	s := plain()
	s.read("P2", Sample, -60, 0.05).at(9).sized(50)
	r := mustFit(t, s, Model{}, Policy{})
	if got := r.subject(t, "P1").Flags; len(got) != 0 {
		t.Errorf("P1 carries %v", got)
	}
	got := r.subject(t, "P2").Flags
	slices.Sort(got)
	if want := []string{"extrapolation", "size_range", "unbracketed"}; !slices.Equal(got, want) {
		t.Errorf("P2 carries %v, want %v", got, want)
	}
}

// The anchor that is off is the one with the largest |z|, when four are there;
// with three, the message says that nothing tells.
func TestAnchorThatDisagreesIsNamed(t *testing.T) {
	s := plain()
	s.Anchors[1].Value.Value = 0.6
	f := mustFit(t, s, Model{}, Policy{}).flagged("anchor_disagrees")
	if f == nil || !strings.Contains(f.Message, "nothing tells which") {
		t.Errorf("three anchors: %+v", f)
	}
	s.Anchors = append(s.Anchors, assigned("D", -15, 0.05), assigned("E", 10, 0.05))
	for _, t := range []float64{1.5, 4.5} {
		s.read("D", Anchor, -15, 0.05).at(t).sized(5)
		s.read("E", Anchor, 10, 0.05).at(t).sized(5)
	}
	r := mustFit(t, s, Model{}, Policy{})
	f = r.flagged("anchor_disagrees")
	if f == nil || f.Subject != "B" {
		t.Errorf("five anchors, B off by 0.6: %+v", f)
	}
}

func TestLimitsComeFromThePolicy(t *testing.T) {
	s := plain()
	s.Readings[3].Raw += 0.13
	if f := mustFit(t, s, Model{}, Policy{}).flagged("reading_disagrees"); f != nil {
		t.Errorf("at the default limit 3: %+v", f)
	}
	if f := mustFit(t, s, Model{}, Policy{StudentizedLimit: 1.5}).flagged("reading_disagrees"); f == nil {
		t.Error("at the limit 1.5: not flagged")
	}
	r := mustFit(t, s, Model{}, Policy{Probability: 0.99, CoverageFactor: 3})
	if x := r.Subjects[0].Expanded; x.CoverageFactor != 3 || x.Probability != 0.99 || x.U != 3*r.Subjects[0].StandardUncertainty {
		t.Errorf("fixed k: %+v", x)
	}
}

// Every code of the engine stands in the page of flags and has its case above;
// the registry's stand there too.
func TestEveryFlagIsDocumentedAndHasItsCase(t *testing.T) {
	page, err := os.ReadFile("doc.go")
	if err != nil {
		t.Fatal(err)
	}
	cases, err := os.ReadFile("flags_test.go")
	if err != nil {
		t.Fatal(err)
	}
	code := regexp.MustCompile(`Flag\{Code: "([a-z0-9_]+)"`)
	count := 0
	for _, pattern := range []string{"*.go", "../api/registry/*.go"} {
		files, err := filepath.Glob(pattern)
		if err != nil {
			t.Fatal(err)
		}
		for _, name := range files {
			if strings.HasSuffix(name, "_test.go") {
				continue
			}
			text, err := os.ReadFile(name)
			if err != nil {
				t.Fatal(err)
			}
			for _, m := range code.FindAllStringSubmatch(string(text), -1) {
				count++
				if !regexp.MustCompile(`\b` + m[1] + `\b`).Match(page) {
					t.Errorf("%s of %s is not in the page of flags", m[1], name)
				}
				if !strings.Contains(name, "/") && !strings.Contains(string(cases), `{"`+m[1]+`"`) {
					t.Errorf("%s has no case", m[1])
				}
			}
		}
	}
	if count < 30 {
		t.Errorf("found %d flags", count)
	}
}

// Two anchors that lie off in one direction are named together.
func TestBothMembersOfABracketAreNamed(t *testing.T) {
	var s Session
	for i, v := range []float64{-40, -38, -1, 1, 38, 40} {
		code := string(rune('A' + i))
		s.Anchors = append(s.Anchors, assigned(code, v, 0.03))
		off := 0.0
		if i == 2 || i == 3 {
			off = 0.26
		}
		for range 3 {
			s.read(code, Anchor, v+off, 0.05)
		}
	}
	f := mustFit(t, s, Model{}, Policy{}).flagged("anchor_disagrees")
	if f == nil || f.Subject != "" || !strings.HasPrefix(f.Message, "Both C (") && !strings.HasPrefix(f.Message, "Both D (") {
		t.Errorf("flag %+v, want C and D named together", f)
	}
}

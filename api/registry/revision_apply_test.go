package registry_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// work runs jobs until there are none.
func (c *chain) work(holder string) {
	c.t.Helper()
	for {
		did, err := c.Work(c.ctx, "TST", holder)
		c.must(err)
		if !did {
			return
		}
	}
}

// inForce is everything public: which version of every record is in force, and
// every reported delta.
func (c *chain) inForce() map[string]string {
	c.t.Helper()
	out := map[string]string{}
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		for _, kind := range []store.Kind{store.KindValue, store.KindMethod, store.KindCalibration, store.KindFinal, store.KindReport} {
			page, _, err := v.List(ctx, store.ListQuery{Laboratory: "TST", Kind: kind, Limit: store.MaxLimit})
			if err != nil {
				return err
			}
			for _, held := range page {
				out[held.Raw.Key.String()] = fmt.Sprintf("%d %s %s", held.Raw.Ref.Version, held.State, held.Raw.Hash)
			}
		}
		for _, rep := range append(c.reports, c.other) {
			for _, line := range rep.Lines {
				d, err := v.Reported(ctx, line.Code)
				if err != nil {
					return err
				}
				out[line.Code] = fmt.Sprint(d)
			}
		}
		return nil
	}))
	return out
}

func (c *chain) propose(p registry.Proposal) registry.Item[store.Revision] {
	c.t.Helper()
	if p.Reason == "" {
		p.Reason = "announced by the producer"
	}
	it, job, err := c.ProposeRevision(c.ctx, c.manager, p)
	c.must(err)
	if job.State != store.JobWaiting {
		c.t.Errorf("job %+v, want it waiting", job)
	}
	return it
}

func (c *chain) revision(code string) registry.Item[store.Revision] {
	c.t.Helper()
	it, err := registry.One[store.Revision](c.ctx, c.Registry, c.auditor, store.KindRevision, code, 2, store.Moment{})
	c.must(err)
	return it
}

func TestRevisionIsDraftedApprovedAndClosedAsASet(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	p := registry.Proposal{Full: true, Values: []registry.ProposedValue{moved("LO-0", "-29.600"), moved("MID-0", "-8.9")}}
	want, _ := c.preview(p)
	before := c.inForce()
	code := c.propose(p).Code
	if diff := cmp.Diff(before, c.inForce()); diff != "" {
		t.Errorf("proposing changes what is in force (-before +after):\n%s", diff)
	}
	c.work("one")
	if diff := cmp.Diff(before, c.inForce()); diff != "" {
		t.Errorf("drawing up changes what is in force (-before +after):\n%s", diff)
	}
	it := c.revision(code)
	set := it.Value.Drafted
	// Two sessions and two standards a generation (a third in the first), two changed values, a sample each.
	if set.Calibrations != 6 || set.Values != 7+2 || set.Finals != 3 || len(set.Untold) != 0 {
		t.Errorf("drafted %+v, want 6 calibrations, 9 values, 3 final values", set)
	}

	// The drafts are what the full preview computed.
	drafts := 0
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		for _, a := range want {
			if a.Kind != store.KindFinal {
				continue
			}
			ref, err := v.DraftOf(ctx, code, a.Ref.Key, nil)
			if err != nil {
				return err
			}
			raw, err := v.Version(ctx, ref.Key, ref.Version)
			if err != nil {
				return err
			}
			f, err := store.Decode[store.Final](raw)
			if err != nil {
				return err
			}
			drafts++
			if math.Abs(f.Value.Value-a.Value-a.Full.Shift) > 1e-12 || math.Abs(f.Value.StandardUncertainty-a.Full.StandardUncertainty) > 1e-12 || a.Full.Shift == 0 {
				t.Errorf("%s drafted as %v ± %v, the preview gave %+v on %v", a.Ref, f.Value.Value, f.Value.StandardUncertainty, a.Full, a.Value)
			}
		}
		return nil
	}))
	if drafts != 3 {
		t.Errorf("%d drafted final values compared, want 3", drafts)
	}

	approve := registry.DecisionRequest{Act: "approved", Version: 2, Reason: "checked against the announcement"}
	for name, try := range map[string]func() error{
		"another hash": func() error {
			_, err := c.ApproveRevision(c.ctx, c.signatory, code, store.Hash{1}, approve)
			return err
		},
		"without the hash": func() error {
			_, err := c.Decide(c.ctx, c.signatory, store.KindRevision, code, approve)
			return err
		},
		"by its author": func() error {
			_, err := c.ApproveRevision(c.ctx, c.manager, code, set.Hash, approve)
			return err
		},
		"by an analyst": func() error {
			_, err := c.ApproveRevision(c.ctx, c.analyst, code, set.Hash, approve)
			return err
		},
		"one member alone": func() error {
			_, err := c.Decide(c.ctx, c.signatory, store.KindFinal, c.finals[2], registry.DecisionRequest{Act: "approved", Version: 2})
			return err
		},
		"closing before": func() error {
			_, err := c.CloseRevision(c.ctx, c.signatory, registry.ClosingRequest{Revision: code, Report: c.reports[0].Code, Action: "annotate", Reason: "small"})
			return err
		},
	} {
		if m := registry.MeaningOf(try()); m != registry.Conflict && m != registry.Refused {
			t.Errorf("%s: %v, want a refusal", name, m)
		}
	}
	if diff := cmp.Diff(before, c.inForce()); diff != "" {
		t.Errorf("a refused approval changes what is in force (-before +after):\n%s", diff)
	}

	_, err := c.ApproveRevision(c.ctx, c.signatory, code, set.Hash, approve)
	c.must(err)
	c.work("two")
	after := c.inForce()
	for name, version := range before {
		affected := false
		for _, a := range want {
			affected = affected || a.Ref.Key.String() == name
		}
		affected = affected && !strings.HasPrefix(name, "report") || strings.Contains(name, "/LO-0/") || strings.Contains(name, "/MID-0/")
		if (after[name] != version) != affected {
			t.Errorf("%s was %s and is %s; affected: %v", name, version, after[name], affected)
		}
		if affected && !strings.HasPrefix(after[name], "2 approved") {
			t.Errorf("%s is %s, want version 2 approved", name, after[name])
		}
	}
	v, err := c.Verify(c.ctx, registry.VerifyRequest{})
	c.must(err)
	if !v.Clean() || v.Equal != v.Recomputed {
		t.Errorf("verification after the revision: %d of %d equal, %v", v.Equal, v.Recomputed, v.Findings)
	}

	sets, err := c.RevisionSets(c.ctx, c.auditor, code, "", 0)
	c.must(err)
	if len(sets) != 3 {
		t.Fatalf("%d sets, want the 3 reports of the chain", len(sets))
	}
	notice, err := c.RevisionNotice(c.ctx, c.auditor, code, c.reports[0].Code)
	c.must(err)
	if a := want[c.reports[0].Lines[0].Code]; len(notice) != 1 || !notice[0].Moved || math.Abs(notice[0].NewValue-notice[0].Value-a.Full.Shift) > 1e-12 || notice[0].Client != "client 0" {
		t.Errorf("notice %+v, want the shift %v", notice, a.Full.Shift)
	}
	for i, action := range []string{"re-issue", "annotate", "no action"} {
		old := c.reports[i]
		done, err := c.CloseRevision(c.ctx, c.signatory, registry.ClosingRequest{Revision: code, Report: old.Code, Action: action, Reason: "decided on " + action})
		c.must(err)
		if _, err := c.CloseRevision(c.ctx, c.signatory, registry.ClosingRequest{Revision: code, Report: old.Code, Action: "no action", Reason: "again"}); registry.MeaningOf(err) != registry.Conflict {
			t.Errorf("a second closing of %s: %v", old.Code, err)
		}
		if action != "re-issue" {
			if done.Closing.Value.Reissued != "" {
				t.Errorf("%s names the report %s", action, done.Closing.Value.Reissued)
			}
			continue
		}
		rep, err := c.Report(c.ctx, c.auditor, done.Closing.Value.Reissued)
		c.must(err)
		if rep.Value.Amends != old.Code || !strings.Contains(rep.Reason, store.FormatCode(code)) || rep.Lines[0].Code == old.Lines[0].Code ||
			rep.Lines[0].Value != notice[0].NewValue || rep.Value.Client != old.Value.Client {
			t.Errorf("amended report %+v with reason %q, want one that cites %s and the revision, with %v", rep.Value, rep.Reason, old.Code, notice[0].NewValue)
		}
	}
	if sets, err = c.RevisionSets(c.ctx, c.auditor, code, "", 0); err != nil || len(sets) != 3 {
		t.Fatalf("%d sets after closing, %v; want 3", len(sets), err)
	}
	for _, s := range sets {
		if s.Closing == nil {
			t.Errorf("the set of report %s is open", s.Report)
		}
	}
	if _, err := c.CloseRevision(c.ctx, c.signatory, registry.ClosingRequest{Revision: code, Report: c.other.Code, Action: "annotate", Reason: "x"}); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("closing a report that does not move: %v", err)
	}
	v, err = c.Verify(c.ctx, registry.VerifyRequest{})
	c.must(err)
	if !v.Clean() {
		t.Errorf("verification after closing: %v", v.Findings)
	}
}

// Two registries that are equal bit by bit: one draws a revision up in one go,
// the other is stopped at random moments, between steps and inside them, and
// goes on each time with another worker. Both end with the same set.
func TestInterruptedRevisionEndsWithTheSameHash(t *testing.T) {
	build := func() *chain { return openChain(t, 4, 0.05, calib.WeightsReplicate) }
	p := registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "-29.600")}}
	whole := build()
	code := whole.propose(p).Code
	whole.work("one")
	want := whole.revision(code).Value.Drafted
	if want.Calibrations != 8 || want.Finals != 4 {
		t.Fatalf("drafted %+v, want 8 calibrations and 4 final values", want)
	}

	for try := range 2 {
		c := build()
		again := c.propose(p).Code
		if again != code {
			t.Fatalf("the second registry drew code %s, not %s: the two are not equal", again, code)
		}
		random := rand.New(rand.NewPCG(uint64(try), 1))
		stopped := 0
		for worker := 0; ; worker++ {
			if worker > 400 {
				t.Fatal("the job does not end")
			}
			ctx, stop := context.WithTimeout(c.ctx, time.Duration(5+random.IntN(20*(1+worker/4)))*time.Millisecond)
			did, err := c.WorkInSteps(ctx, "TST", fmt.Sprint("worker ", worker), 3, nil)
			stop()
			if err == nil && !did {
				break
			}
			if err != nil {
				stopped++
			}
			c.clock = c.clock.Add(time.Minute) // past the lease of a worker that was stopped
		}
		if stopped == 0 {
			t.Error("no worker was stopped: the test shows nothing")
		}
		if got := c.revision(code).Value.Drafted; got.Hash != want.Hash {
			t.Errorf("stopped %d times: drafted %+v, without a stop %+v", stopped, got, want)
		}
		t.Logf("stopped %d times", stopped)
	}
}

func TestSmallStepsResumeWhereTheLastEnded(t *testing.T) {
	p := registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "-29.600")}}
	whole := openChain(t, 3, 0.05, calib.WeightsReplicate)
	code := whole.propose(p).Code
	whole.work("one")
	want := whole.revision(code).Value.Drafted.Hash

	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	c.propose(p)
	// Every worker stops after one step; the last takes up a job that has ended.
	steps := 0
	for worker := 0; worker < 100; worker++ {
		ctx, stop := context.WithCancel(c.ctx)
		did, err := c.WorkInSteps(ctx, "TST", fmt.Sprint("worker ", worker), 1, func() { steps++; stop() })
		stop()
		c.clock = c.clock.Add(time.Minute)
		if err == nil && !did {
			break
		}
	}
	if got := c.revision(code).Value.Drafted.Hash; got != want {
		t.Errorf("in %d steps the set is %s, in one %s", steps, got, want)
	}
	if steps < 10 {
		t.Errorf("%d steps, want one for each version", steps)
	}
}

func TestBadBottleIsDraftedWithoutItsReadings(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	since := instant(c.day(0, 1))
	p := registry.Proposal{Full: true, Units: []store.SuspectUnit{{Unit: c.bottles["bottle 2"], Since: since}}}
	want, _ := c.preview(p)
	code := c.propose(p).Code
	c.work("one")
	set := c.revision(code).Value.Drafted
	if set.Calibrations != 5 || set.Finals != 3 {
		t.Errorf("drafted %+v, want 1 calibration that used the bottle, 4 above it, and 3 final values", set)
	}
	for _, raw := range c.everything() {
		if raw.Kind != store.KindCalibration || raw.Ref.Version < 2 {
			continue
		}
		body, err := store.Decode[store.Calibration](raw)
		c.must(err)
		if len(body.Value.Excluded) > 0 && len(body.Value.Excluded) != 3 {
			t.Errorf("%s leaves out %v, want the 3 readings of the bottle", raw.Ref, body.Value.Excluded)
		}
	}
	notice, err := c.RevisionNotice(c.ctx, c.auditor, code, c.reports[2].Code)
	c.must(err)
	a := want[c.reports[2].Lines[0].Code]
	if d := notice[0].NewValue - notice[0].Value; a.Full == nil || math.Abs(d-a.Full.Shift) > 1e-12 || d == 0 {
		t.Errorf("drafted shift %v, the preview gave %+v", d, a.Full)
	}
	// The first-order prediction starts from exact refits and is linear above them.
	if math.Abs(a.Shift-a.Full.Fixed) > 0.2*math.Abs(a.Full.Fixed) {
		t.Errorf("predicted %v, at fixed variances %v", a.Shift, a.Full.Fixed)
	}
}

func TestWhatCannotBeDrawnUpAgainIsListed(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsDeclared)
	code := c.propose(registry.Proposal{Values: []registry.ProposedValue{{Material: "ALT-HI", Scale: chainScale, Withdrawn: true}}}).Code
	c.work("one")
	set := c.revision(code).Value.Drafted
	if set.Calibrations+set.Values+set.Finals != 0 || len(set.Untold) != 2 {
		t.Fatalf("drafted %+v, want nothing, and the calibration and final value as untold", set)
	}
	for _, u := range set.Untold {
		if u.Why == "" {
			t.Errorf("%s is untold without a reason", u.Ref)
		}
	}
}

func TestLaterWorkIsNotOverruledByARevision(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	code := c.propose(registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "-29.600")}}).Code
	c.work("one")
	// Somebody fits the last generation again, and that is approved first.
	var session string
	for _, raw := range c.everything() {
		if raw.Kind == store.KindCalibration && raw.Ref.Version == 1 {
			body, err := store.Decode[store.Calibration](raw)
			c.must(err)
			if body.Value.Anchors[0].Material == "HI-2" {
				session = body.Value.Session
			}
		}
	}
	fit, err := c.Fit(c.ctx, c.analyst, registry.FitRequest{Session: session, Quantity: "d13C", Reason: "looked at again"})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindCalibration, fit.Code, registry.DecisionRequest{Act: "approved", Version: fit.Version.Ref.Version})
	c.must(err)
	job, err := c.ApproveRevision(c.ctx, c.signatory, code, c.revision(code).Value.Drafted.Hash, registry.DecisionRequest{Version: 2})
	c.must(err)
	c.work("two")
	job, err = c.Job(c.ctx, c.auditor, job.Code)
	c.must(err)
	if job.State != store.JobDone || !strings.Contains(job.Message, "approved since the revision was proposed") {
		t.Errorf("job %+v, want it to name what was left", job)
	}
	now, err := registry.One[store.Calibration](c.ctx, c.Registry, c.auditor, store.KindCalibration, fit.Code, 0, store.Moment{})
	c.must(err)
	if now.Version.Ref != fit.Version.Ref {
		t.Errorf("%s is in force, want the later work %s", now.Version.Ref, fit.Version.Ref)
	}
}

func TestWorkerTakesUpWhatIsProposed(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	it, job, err := c.ProposeRevision(c.ctx, c.manager, registry.Proposal{Reason: "announced", Values: []registry.ProposedValue{moved("LO-0", "-29.600")}})
	c.must(err)
	ctx, stop := context.WithCancel(c.ctx)
	done := make(chan struct{})
	go func() {
		defer close(done)
		c.KeepWorking(ctx, "server", 10*time.Millisecond, func(err error) { t.Error(err) })
	}()
	for deadline := time.Now().Add(time.Minute); time.Now().Before(deadline); time.Sleep(20 * time.Millisecond) {
		now, err := c.Job(c.ctx, c.auditor, job.Code)
		if err != nil || now.State.Ended() {
			break
		}
	}
	stop()
	<-done
	if got := c.revision(it.Code); got.Value.Drafted == nil || got.Value.Drafted.Finals != 3 {
		t.Errorf("after the worker: %+v", got.Value)
	}
}

func TestWrongMethodVersionIsDrawnUpByTheRightOne(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsDeclared)
	right := chainMethod(calib.WeightsReplicate)
	right.Quantities[0].Model.Drift = calib.DriftLinear
	_, err := c.StateMethod(c.ctx, c.manager, "C-solid", right, registry.Edit{After: 1, Reason: "drift was left out"})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindMethod, "C-solid", registry.DecisionRequest{Act: "approved", Version: 2})
	c.must(err)
	p := registry.Proposal{Full: true, Methods: []registry.ProposedMethod{{Method: "C-solid", Version: 1, Use: 2}}}
	got, summary := c.preview(p)
	want := bruteForce(c.everything(), func(raw store.Raw) bool { return raw.Kind == store.KindCalibration })
	if diff := cmp.Diff(want, keysOf(got)); diff != "" {
		t.Errorf("affected (-brute force +statement):\n%s", diff)
	}
	if summary.Reported.Moved != 4 {
		t.Errorf("%d deltas move, want the chain's 3 and the branch's", summary.Reported.Moved)
	}
	code := c.propose(p).Code
	c.work("one")
	set := c.revision(code).Value.Drafted
	if set.Calibrations != 7 || set.Finals != 4 || len(set.Untold) != 0 {
		t.Fatalf("drafted %+v, want 7 calibrations and 4 final values", set)
	}
	_, err = c.ApproveRevision(c.ctx, c.signatory, code, set.Hash, registry.DecisionRequest{Version: 2})
	c.must(err)
	c.work("two")
	for _, raw := range c.everything() {
		if raw.Kind != store.KindCalibration || raw.Ref.Version != 2 {
			continue
		}
		now, err := registry.One[store.Calibration](c.ctx, c.Registry, c.auditor, store.KindCalibration, raw.Code, 0, store.Moment{})
		c.must(err)
		if now.Version.Ref != raw.Ref || now.Value.Model != right.Quantities[0].Model {
			t.Errorf("%s is in force with the model %+v, want %s by the right method", now.Version.Ref, now.Value.Model, raw.Ref)
		}
	}
	a := got[c.other.Lines[0].Code]
	d, err := c.RevisionNotice(c.ctx, c.auditor, code, c.other.Code)
	c.must(err)
	// This delta rests on no revised value: its prediction is the refit itself.
	if x := d[0].NewValue - d[0].Value; math.Abs(x-a.Shift) > 1e-12 || x == 0 {
		t.Errorf("the branch's delta moves by %v, predicted %v", x, a.Shift)
	}
}

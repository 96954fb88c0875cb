package registry_test

import (
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// TestVerifyChainCoversTheTraceAndRecomputesIt holds the verification of one
// code against the trace of the same code: the same versions, each proved.
func TestVerifyChainCoversTheTraceAndRecomputesIt(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	session := b.session(carbonRows(sample))
	b.approvedResult(session.Session.Code)
	report := b.report("Marsh survey", b.final(sample))
	code := report.Lines[0].Code

	trace, err := b.Trace(b.ctx, b.auditor, "", code, 0)
	b.must(err)
	var done, total int64
	v, err := b.VerifyChain(b.ctx, b.auditor, "", code, 0, func(d, n int64) { done, total = d, n })
	b.must(err)
	if !v.Clean() {
		t.Fatalf("findings: %+v", v.Findings)
	}
	want := map[store.Ref]bool{}
	decisions := 0
	for _, n := range trace.Nodes {
		want[n.Ref] = true
		decisions += len(n.Decisions)
	}
	for _, n := range v.Nodes {
		if !want[n.Ref] {
			t.Errorf("%s is verified and not in the trace", n.Ref)
		}
		delete(want, n.Ref)
		if !n.Proved {
			t.Errorf("%s is not proved", n.Ref)
		}
		numbers := n.Kind == store.KindCalibration || n.Kind == store.KindFinal || n.Kind == store.KindReport
		if n.Recomputed != numbers || n.Equal != numbers {
			t.Errorf("%s: recomputed %v, equal %v, want both %v", n.Ref, n.Recomputed, n.Equal, numbers)
		}
	}
	for ref := range want {
		t.Errorf("%s is in the trace and not verified", ref)
	}
	if v.Proved != len(trace.Nodes)+decisions {
		t.Errorf("%d entries proved, want those of %d versions and %d decisions", v.Proved, len(trace.Nodes), decisions)
	}
	if done != int64(len(trace.Nodes)) || total != done {
		t.Errorf("progress ends with %d of %d, want %d", done, total, len(trace.Nodes))
	}
}

func TestVerifyChainAsksForTheRightToRead(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	for _, c := range []struct {
		name  string
		actor registry.Actor
		kind  store.Kind
		code  string
		want  registry.Meaning
	}{
		{"nobody", registry.Actor{}, store.KindMethod, "C-solid", registry.Unauthenticated},
		{"a token that may only import", registry.Actor{Person: "ana", Laboratory: "TST", Roles: []string{registry.Analyst}, Scopes: []string{"import"}}, store.KindMethod, "C-solid", registry.Refused},
		{"another laboratory", registry.Actor{Person: "aud", Laboratory: "OTH", Roles: []string{registry.Auditor}}, store.KindInstrument, "EA1", registry.NotFound},
		{"an unknown reported delta", b.auditor, "", "D7K3M9Q2XG", registry.NotFound},
	} {
		if _, err := b.VerifyChain(b.ctx, c.actor, c.kind, c.code, 0, nil); registry.MeaningOf(err) != c.want {
			t.Errorf("%s: %v, want %s", c.name, err, c.want)
		}
	}
}

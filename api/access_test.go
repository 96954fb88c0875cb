package api_test

import (
	"encoding/json"
	"fmt"
	"slices"
	"sort"
	"strings"
	"testing"

	"deltamoor/api/registry"
)

// permissions says what each operation asks of who sends it. An operation that
// is not here fails the test: whoever adds a route decides who may use it.
var permissions = map[string]registry.Permission{
	"addMaterial": registry.MayManage, "changeMaterial": registry.MayManage, "addUnits": registry.MayManage, "changeUnit": registry.MayImport,
	"addValue": registry.MayManage, "changeValue": registry.MayManage, "assignValue": registry.MayManage,
	"planAssignment": registry.MayManage, "changeAssignment": registry.MayManage, "concludeAssignment": registry.MayManage, "decideAssignment": registry.MayApprove,
	"backLoadValues": registry.MayManage, "quarantineUnit": registry.MayImport, "importUnits": registry.MayManage, "logUses": registry.MayImport, "stateStudy": registry.MayImport,
	"evaluatePlan": registry.MayRead, "simulatePlan": registry.MayRead, "compareValues": registry.MayRead,
	"addInstrument": registry.MayManage, "changeInstrument": registry.MayManage, "addMethod": registry.MayManage, "changeMethod": registry.MayManage,
	"addSession": registry.MayImport, "importSession": registry.MayImport, "importReadings": registry.MayImport, "addSamples": registry.MayImport,
	"exclude": registry.MayFit, "stateOutcome": registry.MayFit, "fitSession": registry.MayFit, "addFinal": registry.MayFit, "changeFinal": registry.MayFit,
	"decideValue": registry.MayApprove, "decideMethod": registry.MayApprove, "decideCalibration": registry.MayApprove, "decideFinal": registry.MayApprove, "decideReport": registry.MayApprove,
	"issueReport": registry.MayApprove,
	// Anybody who reads may preview a revision; recording one is for managers.
	"addRevision": registry.MayManage, "decideRevision": registry.MayApprove, "closeRevision": registry.MayApprove,
	"addPerson": registry.MayAdminister, "changePerson": registry.MayAdminister, "listTokens": registry.MayAdminister,
	// Everybody may make, see and end tokens of their own; of others only administrators.
	"addToken": registry.MayRead, "revokeToken": registry.MayAdminister, "getToken": registry.MayAdminister, "listTokenVersions": registry.MayAdminister, "getTokenVersion": registry.MayAdminister,
	"verify": registry.MayRead, "cancelJob": registry.MayManage, // or whoever started it
	"calculateFit": registry.MayRead, "compare": registry.MayRead, "importBundle": registry.MayManage,
	"calculateConversion": registry.MayRead,
	"addRelation":         registry.MayManage, "changeRelation": registry.MayManage, "decideRelation": registry.MayApprove, "convertValue": registry.MayManage, "convertFinal": registry.MayFit,
	"addFactor": registry.MayFit, "decideFactor": registry.MayApprove,
	"calculatePropagation": registry.MayRead, "propagateCalibration": registry.MayRead, "propagateReported": registry.MayRead,
}

// TestAccessOfEveryRoleToEveryRoute asks every operation of the description as
// every role of the laboratory, as every role of another one, and as nobody.
func TestAccessOfEveryRoleToEveryRoute(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	j.token = b.post(registry.Administrator, "/v1/tokens", map[string]any{"label": "somebody's", "roles": []any{"administrator"}}).text(t, "code")
	j.assignment, _ = b.planCampaign()
	j.revision, j.job = b.revise()
	b.checkpoint() // the first one records the key
	j.verification = b.startVerification()
	b.work()
	d := b.description()
	var names []string
	for path := range d.Paths {
		names = append(names, path)
	}
	sort.Strings(names)
	for _, path := range names {
		for method, op := range d.Paths[path] {
			t.Run(op.OperationID, func(t *testing.T) {
				b := b2(b, t)
				needs, known := permissions[op.OperationID]
				if !known && method == "get" {
					needs, known = registry.MayRead, true
				}
				if !known {
					t.Fatalf("nobody has said who may use %s %s: add it to permissions", method, path)
				}
				q := request{method: strings.ToUpper(method), path: b.fill(j, path, op), headers: map[string]string{}}
				if op.RequestBody != nil {
					q.body, q.headers["Content-Type"] = body(op.OperationID, j), "application/json"
				}
				for _, p := range op.Parameters {
					if p.Name == "If-Match" {
						q.headers["If-Match"] = "*"
					}
				}
				b.unchanged(op.OperationID+" without a token", func() { b.wantProblem(b.do(q), 401, "unauthenticated") })

				for _, role := range registry.Roles {
					q.role, q.laboratory = role, "TST"
					may := registry.Actor{Roles: []string{role}}.May(needs)
					if may && method == "post" {
						continue // what it does when it may is for the other tests
					}
					b.unchanged(op.OperationID+" as "+role, func() {
						a := b.do(q)
						switch {
						case may && a.Status != 200:
							t.Errorf("%s may not %s %s: %d %.300s", role, q.method, q.path, a.Status, a.Body)
						case !may && a.Status != 403:
							t.Errorf("%s may %s %s: %d %.300s", role, q.method, q.path, a.Status, a.Body)
						}
					})
				}

				// Nobody of another laboratory sees or moves anything of this one.
				if !strings.Contains(path, "{") || strings.HasPrefix(path, "/v1/scales") {
					return
				}
				for _, role := range registry.Roles {
					q.role, q.laboratory = role, "OTH"
					b.unchangedOf("TST", op.OperationID+" as a foreign "+role, func() {
						a := b.do(q)
						if a.Status != 404 && a.Status != 403 && !foreign[op.OperationID] {
							t.Errorf("a foreign %s gets %d from %s %s: %.300s", role, a.Status, q.method, q.path, a.Body)
						}
						for _, code := range []string{j.session, j.calibration, j.final, j.report, j.sample, "Marsh survey", "in-house certificate 7"} {
							if strings.Contains(string(a.Body), code) && !strings.Contains(q.path, code) && !strings.Contains(fmt.Sprint(q.body), code) {
								t.Errorf("a foreign %s is told %q by %s %s", role, code, q.method, q.path)
							}
						}
					})
				}
			})
		}
	}
	for name := range permissions {
		if !slices.ContainsFunc(names, func(path string) bool {
			for _, op := range d.Paths[path] {
				if op.OperationID == name {
					return true
				}
			}
			return false
		}) {
			t.Errorf("permissions has %s, which is no operation", name)
		}
	}
}

// foreign operations answer with the asker's own things, under an address that
// every laboratory has: people of the same name, the asker's own ledger.
var foreign = map[string]bool{"getPerson": true, "listPersonVersions": true, "getPersonVersion": true, "changePerson": true, "proveInclusion": true}

// unchangedOf is unchanged for one laboratory.
func (b *bench) unchangedOf(laboratory, what string, f func()) {
	b.t.Helper()
	line := func() string {
		for _, l := range strings.Split(b.state(), "\n") {
			if strings.HasPrefix(l, laboratory+" ") {
				return l
			}
		}
		return ""
	}
	before := line()
	f()
	if after := line(); after != before {
		b.t.Errorf("%s changed laboratory %s: %s, was %s", what, laboratory, after, before)
	}
}

// fill puts the journey's codes into a path, and adds required parameters.
func (b *bench) fill(j journey, path string, op *operation) string {
	b.t.Helper()
	code := map[string]string{"scales": "d13C-VPDB-LSVEC", "relations": "C-OWN", "materials": "FJO-GLY", "units": j.unit, "instruments": "EA1", "methods": "C-solid", "sessions": j.session,
		"calibrations": j.calibration, "samples": j.sample, "finals": j.final, "reports": j.report, "reported": j.reported, "laboratories": "TST", "people": "ana", "tokens": j.token, "assignments": j.assignment, "revisions": j.revision, "jobs": j.job, "verification": j.verification}
	noun := strings.Split(path, "/")[2]
	out := strings.NewReplacer("{code}", code[noun], "{scale}", "d13C-VPDB-LSVEC", "{measurand}", "total", "{quantity}", "d13C", "{version}", "1", "{sha256}", j.upload, "{position}", "2", "{report}", j.report).Replace(path)
	if strings.Contains(out, "{") || strings.Contains(out, "//") {
		b.t.Fatalf("nobody has said what to put into %s: add it to fill", path)
	}
	given := map[string]string{"instrument": "EA1", "method": "C-solid", "first": "2", "scale": "d13C-VPDB-LSVEC", "of": "homogeneity"}
	sep := "?"
	for _, p := range op.Parameters {
		if p.In == "query" && p.Required {
			out += sep + p.Name + "=" + given[p.Name]
			sep = "&"
		}
	}
	if op.OperationID == "getCheckpoint" {
		b.checkpoint()
	}
	return out
}

// body is a body that the schema lets pass, so that refusals are of the asker.
func body(operationID string, j journey) string {
	bodies := map[string]any{
		"addMaterial":    map[string]any{"code": "NEW", "name": "x", "kind": "working"},
		"changeMaterial": map[string]any{"reason": "r", "name": "x", "kind": "working"},
		"addUnits":       map[string]any{"label": "x"}, "changeUnit": map[string]any{"reason": "r", "state": "open"},
		"addValue":       map[string]any{"scale": "d13C-VPDB", "value": 1, "u": 0.1, "basis": "certificate", "valid_from": "2025-01-01T00:00:00Z"},
		"changeValue":    map[string]any{"reason": "r", "value": 1, "u": 0.1, "basis": "certificate", "valid_from": "2025-01-01T00:00:00Z"},
		"assignValue":    map[string]any{"valid_from": "2025-01-01T00:00:00Z", "reason": "r"},
		"planAssignment": campaignPlan(), "changeAssignment": with(campaignPlan(), "reason", "r"),
		"concludeAssignment": map[string]any{"scale": "d13C-VPDB-LSVEC", "valid_from": "2025-01-01T00:00:00Z"},
		"evaluatePlan":       campaignPlan(), "simulatePlan": campaignPlan(),
		"compareValues":  map[string]any{"values": []any{map[string]any{"material": "FJO-GLY", "scale": "d13C-VPDB-LSVEC"}, map[string]any{"material": "USGS41", "scale": "d13C-VPDB-LSVEC"}}},
		"importUnits":    map[string]any{"units": []any{map[string]any{"material": "FJO-GLY", "label": "x"}}},
		"logUses":        map[string]any{"uses": []any{map[string]any{"unit": j.unit, "reason": "r"}}},
		"stateStudy":     map[string]any{"measurements": []any{map[string]any{"unit": "a", "value": 1}, map[string]any{"unit": "a", "value": 1}, map[string]any{"unit": "b", "value": 1}}},
		"quarantineUnit": map[string]any{"reason": "r", "since": "2025-01-01T00:00:00Z"},
		"backLoadValues": map[string]any{"values": []any{map[string]any{"material": "FJO-GLY", "scale": "d13C-VPDB-LSVEC", "value": 1, "stated": map[string]any{"text": "0.1", "kind": "standard"},
			"basis": "literature", "evidence": "e", "valid_from": "2025-01-01T00:00:00Z"}}},
		"addRelation": relation("NEW"), "changeRelation": with(relation(""), "reason", "r"),
		"convertValue": map[string]any{"relation": "C-OWN", "valid_from": "2025-01-01T00:00:00Z"}, "convertFinal": map[string]any{"relation": "C-OWN"},
		"calculateConversion": map[string]any{"relation": "C-OWN", "scale": "d13C-VPDB", "value": -26}, "addFactor": hydrogenFactor(),
		"addInstrument": map[string]any{"code": "NEW", "name": "x"}, "changeInstrument": map[string]any{"reason": "r", "name": "x"},
		"addMethod":      map[string]any{"code": "NEW", "title": "x", "quantities": []any{map[string]any{"quantity": "d13C", "scale": "d13C-VPDB"}}},
		"changeMethod":   map[string]any{"reason": "r", "title": "x", "quantities": []any{map[string]any{"quantity": "d13C", "scale": "d13C-VPDB"}}},
		"addSession":     map[string]any{"instrument": "EA1", "method": "C-solid"},
		"importSession":  map[string]any{"readings": []any{map[string]any{"name": "USGS41", "quantity": "d13C", "raw": 1}}},
		"importReadings": map[string]any{"readings": []any{map[string]any{"name": "USGS41", "quantity": "d13C", "raw": 1}}},
		"exclude":        map[string]any{"act": "exclude", "readings": []any{1}, "cause": "leak", "reason": "r"},
		"stateOutcome":   map[string]any{"quantity": "d13C", "outcome": "accepted", "reason": "r"},
		"fitSession":     map[string]any{"quantity": "d13C", "reason": "r"}, "calculateFit": json.RawMessage(lineFit), "compare": map[string]any{"codes": []any{j.reported, j.reported}},
		"calculatePropagation": json.RawMessage(linePropagation),
		"propagateCalibration": map[string]any{"max_trials": 20000}, "propagateReported": map[string]any{"max_trials": 20000},
		"addSamples": map[string]any{"samples": []any{map[string]any{"client": "c", "label": "l", "wanted": []any{map[string]any{"scale": "d13C-VPDB"}}}}},
		"addFinal":   map[string]any{"sample": j.sample, "scale": "d13C-VPDB-LSVEC"}, "changeFinal": map[string]any{"reason": "r"},
		"issueReport": map[string]any{"client": "Marsh survey", "title": "t", "finals": []any{j.final}},
		"addPerson":   map[string]any{"code": "new", "name": "x", "roles": []any{"analyst"}}, "changePerson": map[string]any{"reason": "r", "name": "x", "roles": []any{"analyst"}},
		"addRevision":    map[string]any{"reason": "r", "values": []any{map[string]any{"material": "FJO-GLY", "scale": "d13C-VPDB-LSVEC", "withdrawn": true}}},
		"decideRevision": map[string]any{"decision": "declined", "reason": "r"}, "closeRevision": map[string]any{"report": j.report, "action": "annotate", "reason": "r"},
		"addToken": map[string]any{"label": "x"}, "revokeToken": map[string]any{"revoked": true},
	}
	var v any = map[string]any{"decision": "withdrawn", "reason": "r"}
	if b, ok := bodies[operationID]; ok {
		v = b
	}
	text, err := json.Marshal(v)
	if err != nil {
		panic(err) // of the test's own literals
	}
	return string(text)
}

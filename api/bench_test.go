package api_test

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"io"
	"log/slog"
	"math/rand/v2"
	"net/http"
	"net/http/httptest"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"deltamoor/api"
	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A bench is the whole server over a temporary embedded database, with two
// laboratories and a token for each role in both.
type bench struct {
	t       testing.TB
	store   *store.Store
	handler http.Handler
	key     ledger.Key // that signs
	folder  string
	log     *lockedBuffer
	// tokens by laboratory and role.
	tokens map[string]map[string]string

	mu      sync.Mutex
	clock   time.Time
	watched []exchanged // every answer, for the comparison with the description
}

// An exchanged request with its answer.
type exchanged struct {
	method, path string
	answer
}

// lockedBuffer collects the log.
type lockedBuffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (l *lockedBuffer) Write(p []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.Write(p)
}

func (l *lockedBuffer) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.String()
}

func (b *bench) now() time.Time {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.clock = b.clock.Add(10 * time.Millisecond)
	return b.clock
}

// openEmpty is a server over a registry that is not initialised.
func openEmpty(t testing.TB, o api.Options) *bench {
	t.Helper()
	b := &bench{t: t, clock: time.Date(2026, 3, 2, 8, 0, 0, 0, time.UTC), folder: t.TempDir(), log: &lockedBuffer{}, tokens: map[string]map[string]string{}}
	var err error
	b.key, err = ledger.NewKey(rand.NewChaCha8([32]byte{7}))
	b.must(err)
	s, err := store.Open(context.Background(), store.Options{Database: filepath.Join(b.folder, "registry.db"), Now: b.now, Migrate: true})
	b.must(err)
	t.Cleanup(func() { s.Close() })
	b.store = s
	o.Log = slog.New(slog.NewTextHandler(b.log, nil))
	o.Now = b.now
	if o.Version == "" {
		o.Version = "test"
	}
	b.handler, err = api.New(b.registry(), o)
	b.must(err)
	return b
}

// registry is the registry under the server, for what has no route.
func (b *bench) registry() *registry.Registry {
	return registry.New(b.store, registry.Options{Now: b.now, Key: &b.key})
}

var people = map[string]string{registry.Analyst: "ana", registry.Signatory: "sig", registry.Manager: "man", registry.Auditor: "aud", registry.Administrator: "ada"}

func openBench(t testing.TB) *bench {
	t.Helper()
	b := openEmpty(t, api.Options{})
	ctx := context.Background()
	r := b.registry()
	secret, err := r.Init(ctx, registry.InitRequest{Laboratory: "TST", Name: "Test laboratory", Person: "ada", PersonName: "Ada", SecondPerson: true})
	b.must(err)
	b.staff(r, "TST", secret)
	secret, err = r.AddLaboratory(ctx, registry.InitRequest{Laboratory: "OTH", Name: "Other laboratory", Person: "ada", PersonName: "Ada"})
	b.must(err)
	b.staff(r, "OTH", secret)
	return b
}

// staff gives a laboratory a person and a token for each role.
func (b *bench) staff(r *registry.Registry, laboratory, secret string) {
	b.t.Helper()
	ctx := context.Background()
	admin, err := r.Authenticate(ctx, secret)
	b.must(err)
	b.tokens[laboratory] = map[string]string{}
	for _, role := range registry.Roles {
		if role != registry.Administrator {
			_, err := r.AddPerson(ctx, admin, people[role], store.Person{Name: role, Roles: []string{role}})
			b.must(err)
		}
		_, b.tokens[laboratory][role], err = r.IssueToken(ctx, admin, registry.TokenRequest{Person: people[role], Label: "test", Roles: []string{role}})
		b.must(err)
	}
}

func (b *bench) must(err error) {
	b.t.Helper()
	if err != nil {
		b.t.Fatal(err)
	}
}

// An answer as it came.
type answer struct {
	Status int
	Header http.Header
	Body   []byte
}

func (a answer) json(t testing.TB) map[string]any {
	t.Helper()
	var v map[string]any
	if err := json.Unmarshal(a.Body, &v); err != nil {
		t.Fatalf("status %d, body %.300q: %v", a.Status, a.Body, err)
	}
	return v
}

// at finds a value in JSON: "items.0.code".
func (a answer) at(t testing.TB, path string) any {
	t.Helper()
	var v any
	if err := json.Unmarshal(a.Body, &v); err != nil {
		t.Fatalf("status %d, body %.300q: %v", a.Status, a.Body, err)
	}
	for _, step := range strings.Split(path, ".") {
		switch x := v.(type) {
		case map[string]any:
			v = x[step]
		case []any:
			i := 0
			if _, err := fmt.Sscan(step, &i); err != nil || i >= len(x) {
				t.Fatalf("no %q in %.500s", path, a.Body)
			}
			v = x[i]
		default:
			t.Fatalf("no %q in %.500s", path, a.Body)
		}
	}
	return v
}

func (a answer) text(t testing.TB, path string) string {
	t.Helper()
	s, _ := a.at(t, path).(string)
	return s
}

// A request under way: role "" sends no token.
type request struct {
	laboratory, role string
	method, path     string
	body             any // string and []byte as they are, anything else as JSON
	headers          map[string]string
}

func (b *bench) do(q request) answer {
	b.t.Helper()
	var body io.Reader
	media := "application/json"
	switch x := q.body.(type) {
	case nil:
		media = ""
	case string:
		body = strings.NewReader(x)
	case []byte:
		body = bytes.NewReader(x)
	default:
		encoded, err := json.Marshal(x)
		b.must(err)
		body = bytes.NewReader(encoded)
	}
	r := httptest.NewRequest(q.method, q.path, body)
	if media != "" {
		r.Header.Set("Content-Type", media)
	}
	if q.laboratory == "" {
		q.laboratory = "TST"
	}
	if q.role != "" {
		r.Header.Set("Authorization", "Bearer "+b.tokens[q.laboratory][q.role])
	}
	for name, value := range q.headers {
		if value == "" {
			r.Header.Del(name)
		} else {
			r.Header.Set(name, value)
		}
	}
	w := httptest.NewRecorder()
	b.handler.ServeHTTP(w, r)
	a := answer{w.Code, w.Header(), w.Body.Bytes()}
	b.mu.Lock()
	b.watched = append(b.watched, exchanged{q.method, r.URL.Path, a})
	b.mu.Unlock()
	return a
}

func (b *bench) get(role, path string) answer {
	b.t.Helper()
	return b.want(200, request{role: role, method: "GET", path: path})
}

func (b *bench) post(role, path string, body any, headers ...string) answer {
	b.t.Helper()
	return b.want(201, request{role: role, method: "POST", path: path, body: body, headers: pairs(headers)})
}

func pairs(list []string) map[string]string {
	m := map[string]string{}
	for i := 0; i+1 < len(list); i += 2 {
		m[list[i]] = list[i+1]
	}
	return m
}

// want carries out a request and stops the test at another status.
func (b *bench) want(status int, q request) answer {
	b.t.Helper()
	a := b.do(q)
	if a.Status != status {
		if a.Status >= 500 {
			b.t.Log(b.log)
		}
		b.t.Fatalf("%s %s as %s: status %d, want %d: %.1000s", q.method, q.path, q.role, a.Status, status, a.Body)
	}
	return a
}

// decide decides on a resource by its present ETag.
func (b *bench) decide(role, path, decision string) answer {
	b.t.Helper()
	tag := b.newestTag(path)
	return b.post(role, path+"/decisions", map[string]any{"decision": decision, "reason": "test"}, "If-Match", tag)
}

// newestTag is the ETag of a record's newest version.
func (b *bench) newestTag(path string) string {
	b.t.Helper()
	versions := b.get(registry.Auditor, path+"/versions?limit=500").json(b.t)["items"].([]any)
	number := versions[len(versions)-1].(map[string]any)["version"]
	return b.get(registry.Auditor, fmt.Sprintf("%s/versions/%v", path, number)).Header.Get("ETag")
}

// state is the root of the ledger and the number of uploads: what every write moves.
func (b *bench) state() string {
	b.t.Helper()
	var s string
	b.must(b.store.Read(context.Background(), func(ctx context.Context, v *store.View) error {
		s = ""
		for _, laboratory := range []string{"TST", "OTH", store.Common} {
			root, size, err := v.Root(ctx, laboratory, -1)
			if err != nil {
				return err
			}
			s += fmt.Sprintf("%s %d %s\n", laboratory, size, root)
		}
		return nil
	}))
	return s
}

// unchanged runs something that must leave no trace.
func (b *bench) unchanged(what string, f func()) {
	b.t.Helper()
	before := b.state()
	f()
	if after := b.state(); after != before {
		b.t.Errorf("%s changed the registry:\n%swas\n%s", what, after, before)
	}
}

// checkpoint signs the ledger and asks for the signed text.
func (b *bench) checkpoint() {
	b.t.Helper()
	for _, laboratory := range []string{"TST", store.Common} {
		_, err := b.registry().SignCheckpoint(context.Background(), laboratory, b.key)
		b.must(err)
	}
	if a := b.get(registry.Auditor, "/v1/ledger/checkpoint"); !strings.HasPrefix(string(a.Body), "deltamoor.local/TST\n") {
		b.t.Errorf("checkpoint: %q", a.Body)
	}
}

func sha(text string) store.Hash { return sha256.Sum256([]byte(text)) }

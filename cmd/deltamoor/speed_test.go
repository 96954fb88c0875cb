package main

import (
	"path/filepath"
	"syscall"
	"testing"
)

// BenchmarkServeToFirstAnswer is the time from starting the process, on a
// registry of one laboratory, to the answer of a first request for a record.
func BenchmarkServeToFirstAnswer(b *testing.B) {
	data := filepath.Join(b.TempDir(), "lab")
	token := initRegistry(b, "--data", data)
	for b.Loop() {
		s, err := startServer(cleanEnvironment(), b.TempDir(), "--data", data)
		if err != nil {
			b.Fatal(err)
		}
		a, err := ask("GET", s.url+"/v1/materials/USGS40", token, nil)
		if err != nil || a.status != 200 {
			b.Fatalf("%v, %d %s", err, a.status, a.body)
		}
		b.StopTimer()
		if err := s.end(syscall.SIGTERM); err != nil {
			b.Fatal(err)
		}
		b.StartTimer()
	}
}

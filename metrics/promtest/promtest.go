// Package promtest runs a real Prometheus server against a target, for tests.
package promtest

import (
	"encoding/json"
	"fmt"
	"net"
	"net/http"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"testing"
	"time"
)

// Server is a running Prometheus.
type Server struct{ url string }

// Start runs the Prometheus that is installed (Debian package prometheus) in a
// directory of its own, scraping target (host:port) every second until the
// test ends. Where none is installed the test is skipped, loudly.
func Start(t *testing.T, target string) *Server {
	t.Helper()
	return StartOn(t, filepath.Join(t.TempDir(), "data"), target)
}

// StartOn is Start with a storage that may hold blocks already.
func StartOn(t *testing.T, data, target string) *Server {
	t.Helper()
	prog, err := exec.LookPath("prometheus")
	if err != nil {
		t.Skip("SKIPPED: prometheus (Debian package prometheus) is not installed: no real server scraped the daemon")
	}
	dir := t.TempDir()
	conf := filepath.Join(dir, "prometheus.yml")
	text := fmt.Sprintf("global:\n  scrape_interval: 1s\nscrape_configs:\n- job_name: offbeat\n  static_configs:\n  - targets: [%q]\n", target)
	if err := os.WriteFile(conf, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	addr := l.Addr().String()
	l.Close()
	log, err := os.Create(filepath.Join(dir, "log"))
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(prog, "--config.file="+conf, "--storage.tsdb.path="+data, "--web.listen-address="+addr)
	cmd.Stdout, cmd.Stderr = log, log
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		cmd.Process.Signal(os.Interrupt)
		done := make(chan error, 1)
		go func() { done <- cmd.Wait() }()
		select {
		case <-done:
		case <-time.After(10 * time.Second):
			cmd.Process.Kill()
			<-done
		}
		if t.Failed() {
			b, _ := os.ReadFile(log.Name())
			t.Logf("prometheus said:\n%s", b)
		}
	})
	return &Server{url: "http://" + addr}
}

// Sample is one element of an instant vector.
type Sample struct {
	Labels map[string]string
	Value  float64
}

// Query evaluates an expression now.
func (s *Server) Query(expr string) ([]Sample, error) { return s.QueryAt(expr, time.Now()) }

// QueryAt evaluates an expression as of a time.
func (s *Server) QueryAt(expr string, at time.Time) ([]Sample, error) {
	c := http.Client{Timeout: 5 * time.Second}
	r, err := c.Get(s.url + "/api/v1/query?" + url.Values{"query": {expr}, "time": {at.UTC().Format(time.RFC3339Nano)}}.Encode())
	if err != nil {
		return nil, err
	}
	defer r.Body.Close()
	var a struct {
		Status, Error string
		Data          struct {
			Result []struct {
				Metric map[string]string
				Value  [2]any
			}
		}
	}
	if err := json.NewDecoder(r.Body).Decode(&a); err != nil {
		return nil, err
	}
	if a.Status != "success" {
		return nil, fmt.Errorf("prometheus: %s", a.Error)
	}
	var out []Sample
	for _, x := range a.Data.Result {
		text, _ := x.Value[1].(string)
		v, err := strconv.ParseFloat(text, 64)
		if err != nil {
			return nil, err
		}
		out = append(out, Sample{x.Metric, v})
	}
	return out, nil
}

// Wait asks until the expression gives a sample, at most for limit.
func (s *Server) Wait(t *testing.T, expr string, limit time.Duration) []Sample {
	t.Helper()
	var last error
	for end := time.Now().Add(limit); time.Now().Before(end); time.Sleep(200 * time.Millisecond) {
		got, err := s.Query(expr)
		if err == nil && len(got) > 0 {
			return got
		}
		last = err
	}
	t.Fatalf("prometheus gave nothing for %s in %v (last error: %v)", expr, limit, last)
	return nil
}

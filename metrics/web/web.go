// Package web serves what a daemon has to say over HTTP: /metrics, /healthz,
// /readyz, a page and its API. TLS and basic authentication come from the web
// configuration file that Prometheus' own exporters use.
package web

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"os"
	"strings"
	"syscall"
	"time"

	"github.com/goccy/go-yaml"
	toolkit "github.com/prometheus/exporter-toolkit/web"
)

// Config says where and how to serve.
type Config struct {
	Listen        string // host:port
	WebConfigFile string // of exporter-toolkit; empty: plain HTTP without authentication
	Insecure      bool   // allow other than loopback without authentication
	Log           *slog.Logger
}

// Handlers are what is served. Health and Ready return one line for each thing
// that is wrong, none when all is well; they are called from any goroutine.
type Handlers struct {
	Metrics http.Handler
	Page    http.Handler // of /, may be nil
	API     http.Handler // of /api/v1/, may be nil
	Health  func() []string
	Ready   func() []string
}

// Server is a server that listens already and does not serve yet.
type Server struct {
	cfg  Config
	l    net.Listener
	http *http.Server
	url  string
}

// Listen checks the configuration and opens the port. Each way to fail is one
// line that says what, where and what to do.
func Listen(cfg Config, h Handlers) (*Server, error) {
	if cfg.Log == nil {
		cfg.Log = slog.New(slog.DiscardHandler)
	}
	host, _, err := net.SplitHostPort(cfg.Listen)
	if err != nil {
		return nil, fmt.Errorf("listen address %q: must be HOST:PORT, such as 127.0.0.1:9471", cfg.Listen)
	}
	guarded, tls, err := readWebConfig(cfg.WebConfigFile)
	if err != nil {
		return nil, err
	}
	if !loopback(host) && !guarded && !cfg.Insecure {
		return nil, fmt.Errorf("refusing to listen on %s without authentication: give a web configuration file with basic_auth_users or client certificates (web_config), listen on 127.0.0.1, or say `insecure: true`", cfg.Listen)
	}
	l, err := net.Listen("tcp", cfg.Listen)
	if err != nil {
		if errors.Is(err, syscall.EADDRINUSE) {
			return nil, fmt.Errorf("listen address %s: the port is in use: stop the other program or choose another port", cfg.Listen)
		}
		return nil, fmt.Errorf("listen address %s: %w", cfg.Listen, err)
	}
	s := &Server{cfg: cfg, l: l, url: "http://" + l.Addr().String()}
	if tls {
		s.url = "https://" + l.Addr().String()
	}
	s.http = &http.Server{
		Handler:           mux(h),
		ReadHeaderTimeout: 5 * time.Second,
		ReadTimeout:       15 * time.Second,
		WriteTimeout:      30 * time.Second,
		IdleTimeout:       2 * time.Minute,
		MaxHeaderBytes:    16 << 10,
		ErrorLog:          slog.NewLogLogger(cfg.Log.Handler(), slog.LevelDebug),
	}
	return s, nil
}

// URL returns where the server is reached.
func (s *Server) URL() string { return s.url }

// Serve serves until ctx ends, then lets requests under way finish for a few
// seconds.
func (s *Server) Serve(ctx context.Context) error {
	done := make(chan error, 1)
	listen, systemd := []string{s.cfg.Listen}, false
	flags := &toolkit.FlagConfig{WebListenAddresses: &listen, WebSystemdSocket: &systemd, WebConfigFile: &s.cfg.WebConfigFile}
	quiet := slog.New(slog.DiscardHandler) // the daemon has said where it listens
	go func() { done <- toolkit.Serve(s.l, s.http, flags, quiet) }()
	select {
	case err := <-done:
		return fmt.Errorf("serving on %s: %w", s.cfg.Listen, err)
	case <-ctx.Done():
	}
	grace, cancel := context.WithTimeout(context.Background(), 3*time.Second)
	defer cancel()
	if err := s.http.Shutdown(grace); err != nil {
		s.http.Close()
	}
	if err := <-done; err != nil && !errors.Is(err, http.ErrServerClosed) {
		return fmt.Errorf("serving on %s: %w", s.cfg.Listen, err)
	}
	return nil
}

// Close gives the port back without having served.
func (s *Server) Close() error { return s.l.Close() }

// loopback reports whether a host can only be reached from this machine.
func loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}

// readWebConfig checks the file and reports whether it asks who comes, and
// whether it serves TLS.
func readWebConfig(file string) (guarded, tls bool, err error) {
	if file == "" {
		return false, false, nil
	}
	bad := func(err error) error {
		return fmt.Errorf("web configuration %s: %s", file, strings.Join(strings.Fields(err.Error()), " "))
	}
	data, err := os.ReadFile(file)
	if err != nil {
		var path *os.PathError
		if errors.As(err, &path) {
			err = path.Err
		}
		return false, false, bad(err)
	}
	if err := toolkit.Validate(file); err != nil {
		return false, false, bad(err)
	}
	var c struct {
		Users map[string]string `yaml:"basic_auth_users"`
		TLS   *struct {
			ClientAuth string `yaml:"client_auth_type"`
		} `yaml:"tls_server_config"`
	}
	if err := yaml.Unmarshal(data, &c); err != nil {
		return false, false, bad(err)
	}
	guarded = len(c.Users) > 0 || c.TLS != nil && strings.HasPrefix(c.TLS.ClientAuth, "RequireAndVerify")
	return guarded, c.TLS != nil, nil
}

func mux(h Handlers) http.Handler {
	m := http.NewServeMux()
	m.Handle("/metrics", h.Metrics)
	m.Handle("/healthz", words("healthy", h.Health))
	m.Handle("/readyz", words("ready", h.Ready))
	if h.Page != nil {
		m.Handle("/{$}", h.Page)
	}
	if h.API != nil {
		m.Handle("/api/v1/", h.API)
	}
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		if r.Method != http.MethodGet && r.Method != http.MethodHead && !strings.HasPrefix(r.URL.Path, "/api/v1/") {
			w.Header().Set("Allow", "GET, HEAD")
			http.Error(w, "only GET and HEAD here", http.StatusMethodNotAllowed)
			return
		}
		w.Header().Set("X-Content-Type-Options", "nosniff")
		w.Header().Set("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'; base-uri 'none'; form-action 'none'")
		w.Header().Set("Referrer-Policy", "no-referrer")
		w.Header().Set("Cache-Control", "no-store")
		m.ServeHTTP(w, r)
	})
}

// words answers 200 and the good word, or 503 and what is wrong, a line each.
func words(good string, check func() []string) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		w.Header().Set("Content-Type", "text/plain; charset=utf-8")
		wrong := check()
		if len(wrong) == 0 {
			fmt.Fprintln(w, good)
			return
		}
		w.WriteHeader(http.StatusServiceUnavailable)
		for _, line := range wrong {
			fmt.Fprintln(w, line)
		}
	})
}

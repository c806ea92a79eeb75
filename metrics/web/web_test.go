package web

import (
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"fmt"
	"io"
	"math/big"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"golang.org/x/crypto/bcrypt"

	"offbeat/dsp"
	"offbeat/metrics"
)

func handlers(e *metrics.Exporter, wrong *[]string) Handlers {
	check := func() []string { return *wrong }
	return Handlers{Metrics: e.Handler(), Page: Page(e, "test"), Health: check, Ready: check}
}

// serve starts a server and returns its URL and a client.
func serve(t *testing.T, cfg Config, h Handlers) string {
	t.Helper()
	s, err := Listen(cfg, h)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- s.Serve(ctx) }()
	t.Cleanup(func() {
		cancel()
		if err := <-done; err != nil {
			t.Error(err)
		}
	})
	return s.URL()
}

func get(t *testing.T, c *http.Client, url, user, pass string) (int, string) {
	t.Helper()
	req, _ := http.NewRequest("GET", url, nil)
	if user != "" {
		req.SetBasicAuth(user, pass)
	}
	r, err := c.Do(req)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Body.Close()
	b, err := io.ReadAll(r.Body)
	if err != nil {
		t.Fatal(err)
	}
	return r.StatusCode, string(b)
}

func TestServes(t *testing.T) {
	e := metrics.New(metrics.BuildInfo{Version: "test"})
	b := e.Bench("counter", metrics.BenchInfo{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: "a test"})
	r := dsp.Blank(0.5, dsp.Apart)
	r.Beat, r.Error, r.BeatU, r.Offset, r.OffsetU, r.CarrierTone, r.CarrierCN0 = -3.2, -3.2, 0.002, -3.2e-7, 2e-10, 1000, 55
	b.Reading(r)
	wrong := []string{}
	url := serve(t, Config{Listen: "127.0.0.1:0"}, handlers(e, &wrong))
	c := http.DefaultClient
	for _, x := range []struct {
		path string
		code int
		want string
	}{
		{"/metrics", 200, `offbeat_beat_hertz{bench="counter"} -3.2`},
		{"/healthz", 200, "healthy\n"},
		{"/readyz", 200, "ready\n"},
		{"/", 200, "-3.2000 Hz, low: raise it"},
		{"/nothing", 404, ""},
		{"/../../etc/passwd", 404, ""},
	} {
		code, body := get(t, c, url+x.path, "", "")
		if code != x.code || !strings.Contains(body, x.want) {
			t.Errorf("%s: %d %s", x.path, code, body)
		}
	}
	wrong = append(wrong, "bench counter: no readings for 7 s", "journal: disk full")
	if code, body := get(t, c, url+"/healthz", "", ""); code != 503 || body != "bench counter: no readings for 7 s\njournal: disk full\n" {
		t.Errorf("%d %q", code, body)
	}
	resp, err := c.Post(url+"/metrics", "text/plain", strings.NewReader("x"))
	if err != nil {
		t.Fatal(err)
	}
	resp.Body.Close()
	if resp.StatusCode != 405 {
		t.Errorf("POST: %d", resp.StatusCode)
	}
}

// A header that is too large or that never ends does not keep others waiting.
func TestBounds(t *testing.T) {
	e := metrics.New(metrics.BuildInfo{})
	wrong := []string{}
	url := serve(t, Config{Listen: "127.0.0.1:0"}, handlers(e, &wrong))
	addr := strings.TrimPrefix(url, "http://")
	for range 50 { // never finished
		c, err := net.Dial("tcp", addr)
		if err != nil {
			t.Fatal(err)
		}
		defer c.Close()
		fmt.Fprintf(c, "GET / HTTP/1.1\r\nX-Slow: ")
	}
	req, _ := http.NewRequest("GET", url+"/healthz", nil)
	req.Header.Set("X-Large", strings.Repeat("x", 64<<10))
	r, err := http.DefaultClient.Do(req)
	if err == nil {
		r.Body.Close()
		if r.StatusCode != 431 {
			t.Errorf("a header of 64 KiB: %d", r.StatusCode)
		}
	}
	if code, _ := get(t, http.DefaultClient, url+"/healthz", "", ""); code != 200 {
		t.Errorf("beside slow clients: %d", code)
	}
}

func certificate(t *testing.T, dir string) *x509.CertPool {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	tpl := &x509.Certificate{SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "localhost"}, NotBefore: time.Now().Add(-time.Hour),
		NotAfter: time.Now().Add(time.Hour), IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign | x509.KeyUsageDigitalSignature}
	der, err := x509.CreateCertificate(rand.Reader, tpl, tpl, &key.PublicKey, key)
	if err != nil {
		t.Fatal(err)
	}
	kd, _ := x509.MarshalECPrivateKey(key)
	write(t, dir, "cert.pem", string(pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: der})))
	write(t, dir, "key.pem", string(pem.EncodeToMemory(&pem.Block{Type: "EC PRIVATE KEY", Bytes: kd})))
	pool := x509.NewCertPool()
	cert, _ := x509.ParseCertificate(der)
	pool.AddCert(cert)
	return pool
}

func write(t *testing.T, dir, name, text string) string {
	t.Helper()
	f := filepath.Join(dir, name)
	if err := os.WriteFile(f, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return f
}

func TestTLSAndBasicAuth(t *testing.T) {
	dir := t.TempDir()
	pool := certificate(t, dir)
	hashed, err := bcrypt.GenerateFromPassword([]byte("test"), bcrypt.MinCost)
	if err != nil {
		t.Fatal(err)
	}
	file := write(t, dir, "web.yml", "tls_server_config:\n  cert_file: cert.pem\n  key_file: key.pem\nbasic_auth_users:\n  skerrow: "+string(hashed)+"\n")
	e := metrics.New(metrics.BuildInfo{})
	wrong := []string{}
	url := serve(t, Config{Listen: "127.0.0.1:0", WebConfigFile: file}, handlers(e, &wrong))
	if !strings.HasPrefix(url, "https://") {
		t.Fatal(url)
	}
	c := &http.Client{Transport: &http.Transport{TLSClientConfig: &tls.Config{RootCAs: pool}}}
	if code, _ := get(t, c, url+"/metrics", "", ""); code != 401 {
		t.Errorf("without a password: %d", code)
	}
	if code, _ := get(t, c, url+"/metrics", "skerrow", "wrong"); code != 401 {
		t.Errorf("with a wrong password: %d", code)
	}
	if code, body := get(t, c, url+"/metrics", "skerrow", "test"); code != 200 || !strings.Contains(body, "offbeat_build_info") {
		t.Errorf("with the password: %d %s", code, body)
	}
}

func TestRefusals(t *testing.T) {
	dir := t.TempDir()
	certificate(t, dir)
	open := write(t, dir, "open.yml", "tls_server_config:\n  cert_file: cert.pem\n  key_file: key.pem\n")
	bad := write(t, dir, "bad.yml", "tls_server_config:\n  no_such_key: 1\n")
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	e := metrics.New(metrics.BuildInfo{})
	wrong := []string{}
	for _, c := range []struct {
		cfg  Config
		want string
	}{
		{Config{Listen: "9471"}, "must be HOST:PORT"},
		{Config{Listen: "0.0.0.0:0"}, "refusing to listen on 0.0.0.0:0 without authentication"},
		{Config{Listen: ":0"}, "without authentication"},
		{Config{Listen: "0.0.0.0:0", WebConfigFile: open}, "without authentication"},
		{Config{Listen: "127.0.0.1:0", WebConfigFile: bad}, "no_such_key"},
		{Config{Listen: "127.0.0.1:0", WebConfigFile: filepath.Join(dir, "none.yml")}, "no such file"},
		{Config{Listen: l.Addr().String()}, "the port is in use"},
	} {
		s, err := Listen(c.cfg, handlers(e, &wrong))
		if err == nil {
			s.Close()
			t.Errorf("%+v: accepted", c.cfg)
		} else if !strings.Contains(err.Error(), c.want) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%+v: %v", c.cfg, err)
		}
	}
	s, err := Listen(Config{Listen: "0.0.0.0:0", Insecure: true}, handlers(e, &wrong))
	if err != nil {
		t.Fatal(err)
	}
	s.Close()
}

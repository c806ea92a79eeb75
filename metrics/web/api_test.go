package web

import (
	"fmt"
	"io"
	"math"
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"

	"offbeat/dsp"
	"offbeat/metrics"
)

// fakeDesk has one bench, counter, and remembers what was asked of it.
type fakeDesk struct{ did []string }

func (f *fakeDesk) find(bench, what string) error {
	if bench != "counter" {
		return ErrNoBench
	}
	f.did = append(f.did, what)
	return nil
}

func (f *fakeDesk) Declare(bench string, c dsp.Claim, hz float64) (string, error) {
	if hz == 9 {
		return "", fmt.Errorf("no tone within 3 Hz of 9 Hz")
	}
	return "so be it", f.find(bench, fmt.Sprintf("%s %g", c, hz))
}

func (f *fakeDesk) Ask(bench string, s dsp.Step) (dsp.Progress, error) {
	return dsp.Progress{Step: s, Stage: dsp.Steadying, Text: "wait", Left: math.NaN()}, f.find(bench, string(s))
}

func (f *fakeDesk) Cancel(bench string) (dsp.Progress, error) {
	return dsp.Progress{Stage: dsp.Cancelled, Left: math.NaN()}, f.find(bench, "cancel")
}

func (f *fakeDesk) Progress(bench string) (dsp.Progress, error) {
	return dsp.Progress{Step: dsp.PullWire, Stage: dsp.Waiting, Text: "pull", Left: 12.5}, f.find(bench, "look")
}

func TestAPI(t *testing.T) {
	desk := &fakeDesk{}
	wrong := []string{}
	h := handlers(metrics.New(metrics.BuildInfo{}), &wrong)
	h.API = API(desk)
	url := serve(t, Config{Listen: "127.0.0.1:0"}, h)
	const id, step = "/api/v1/benches/counter/identity", "/api/v1/benches/counter/step"
	for _, c := range []struct {
		method, path, body, header string
		code                       int
		want, did                  string
	}{
		{"POST", id, `{"local_tone_hz":1003.2}`, "", 200, `{"settled":"so be it"}`, "local 1003.2"},
		{"POST", id, `{"carrier_tone_hz":1000}`, "Sec-Fetch-Site: same-origin", 200, "so be it", "carrier 1000"},
		{"POST", id, `{"local_tone_hz":0}`, "", 200, "so be it", "local 0"},
		{"POST", id, ` {"swap":true} `, "Origin: SELF", 200, "so be it", "swap 0"},
		{"POST", id, `{"forget":true}`, "", 200, "so be it", "forget 0"},
		{"POST", id, `{"local_tone_hz":9}`, "", 409, `{"error":"no tone within 3 Hz of 9 Hz"}`, ""},
		{"POST", "/api/v1/benches/other/identity", `{"swap":true}`, "", 404, "no bench of this name", ""},
		{"POST", id, `{}`, "", 400, "say one of", ""},
		{"POST", id, `{"swap":true,"forget":true}`, "", 400, "say one of", ""},
		{"POST", id, `{"swop":true}`, "", 400, "swop", ""},
		{"POST", id, `{"swap":true}{}`, "", 400, "more than one", ""},
		{"POST", id, `{"local_tone_hz":"x"}`, "", 400, "the body", ""},
		{"POST", id, `nonsense`, "", 400, "the body", ""},
		{"POST", id, ``, "", 400, "the body", ""},
		{"POST", id, `{"swap":true` + strings.Repeat(" ", 5000) + `}`, "", 413, "4096 bytes", ""},
		{"POST", id, `{"swap":true}` + strings.Repeat(" ", 5000), "", 413, "4096 bytes", ""},
		{"POST", id, `{"swap":true}`, "Content-Type: text/plain", 415, "application/json", ""},
		{"POST", id, `{"swap":true}`, "Origin: http://example.test", 403, "only the page of this daemon", ""},
		{"POST", id, `{"swap":true}`, "Sec-Fetch-Site: cross-site", 403, "only the page of this daemon", ""},
		{"POST", id, `{"swap":true}`, "Host: example.test", 403, "only this machine", ""}, // a name that was led here
		{"GET", id, "", "", 405, "", ""},
		{"DELETE", step, "", "", 405, "", ""},
		{"POST", step, `{"step":"pull-wire"}`, "", 200, `{"step":"pull-wire","stage":"steadying","text":"wait","left_s":null,"over":false}`, "pull-wire"},
		{"POST", step, `{"step":"move-dial"}`, "", 200, "steadying", "move-dial"},
		{"POST", step, `{"step":"cancel"}`, "", 200, `{"stage":"cancelled","left_s":null,"over":true}`, "cancel"},
		{"POST", step, `{"step":"dance"}`, "", 400, "must be pull-wire, move-dial or cancel", ""},
		{"GET", step, "", "", 200, `{"step":"pull-wire","stage":"waiting","text":"pull","left_s":12.5,"over":false}`, "look"},
		{"GET", "/api/v1/benches/other/step", "", "", 404, "no bench", ""},
		{"GET", "/api/v1/nothing", "", "", 404, "", ""},
	} {
		desk.did = nil
		req, err := http.NewRequest(c.method, url+c.path, strings.NewReader(c.body))
		if err != nil {
			t.Fatal(err)
		}
		req.Header.Set("Content-Type", "application/json")
		if k, v, ok := strings.Cut(c.header, ": "); ok {
			if req.Header.Set(k, strings.ReplaceAll(v, "SELF", url)); k == "Host" {
				req.Host = v
			}
		}
		r, err := http.DefaultClient.Do(req)
		if err != nil {
			t.Fatal(err)
		}
		b, _ := io.ReadAll(r.Body)
		r.Body.Close()
		if r.StatusCode != c.code || !strings.Contains(string(b), c.want) || strings.Join(desk.did, ",") != c.did {
			t.Errorf("%s %s %.40s (%s): %d %s, did %q", c.method, c.path, c.body, c.header, r.StatusCode, b, desk.did)
		}
	}
}

// From another machine nothing is changed, whoever it is.
func TestAPIFromElsewhere(t *testing.T) {
	desk := &fakeDesk{}
	for _, from := range []string{"192.0.2.7:4711", "[2001:db8::7]:4711", ""} {
		r := httptest.NewRequest("POST", "http://127.0.0.1:9471/api/v1/benches/counter/identity", strings.NewReader(`{"swap":true}`))
		r.Header.Set("Content-Type", "application/json")
		r.RemoteAddr = from
		w := httptest.NewRecorder()
		API(desk).ServeHTTP(w, r)
		if w.Code != 403 || len(desk.did) > 0 {
			t.Errorf("%q: %d %s", from, w.Code, w.Body)
		}
	}
}

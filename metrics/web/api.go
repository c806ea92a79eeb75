package web

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"

	"offbeat/dsp"
)

// Desk takes what the user says and does at the benches. Its methods are called
// from any goroutine. An error is one line for the user; ErrNoBench says that
// there is no bench of that name, ErrBusy that it does not answer now.
type Desk interface {
	Declare(bench string, c dsp.Claim, hz float64) (settled string, err error)
	Ask(bench string, s dsp.Step) (dsp.Progress, error)
	Cancel(bench string) (dsp.Progress, error)
	Progress(bench string) (dsp.Progress, error)
}

// What a Desk may say of a bench.
var (
	ErrNoBench = errors.New("there is no bench of this name")
	ErrBusy    = errors.New("the bench gets no sound now, or does not keep up: try again when it gives readings")
)

const mostBody = 4 << 10 // bytes of a request's body

// API answers under /api/v1/: what changes something is taken from this machine
// and this origin only.
func API(d Desk) http.Handler {
	m := http.NewServeMux()
	m.Handle("POST /api/v1/benches/{name}/identity", guard(identity(d)))
	m.Handle("POST /api/v1/benches/{name}/step", guard(takeStep(d)))
	m.HandleFunc("GET /api/v1/benches/{name}/step", func(w http.ResponseWriter, r *http.Request) {
		p, err := d.Progress(r.PathValue("name"))
		answerStep(w, p, err)
	})
	return m
}

// guard lets requests through that come from this machine, from the page itself or
// from no page at all, and carry JSON: a page elsewhere cannot send that unasked.
func guard(next http.HandlerFunc) http.Handler {
	origin := http.NewCrossOriginProtection()
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		from, _, _ := net.SplitHostPort(r.RemoteAddr)
		to, _, err := net.SplitHostPort(r.Host)
		if err != nil {
			to = r.Host
		}
		switch err := origin.Check(r); {
		case !loopback(from) || !loopback(to):
			refuse(w, http.StatusForbidden, errors.New("only this machine may change something: ask from there, by localhost or 127.0.0.1"))
		case err != nil:
			refuse(w, http.StatusForbidden, errors.New("only the page of this daemon may change something, no other one"))
		case r.Header.Get("Content-Type") != "application/json":
			refuse(w, http.StatusUnsupportedMediaType, errors.New("say Content-Type: application/json"))
		default:
			r.Body = http.MaxBytesReader(w, r.Body, mostBody)
			next(w, r)
		}
	})
}

// decode reads one JSON object and nothing else, and answers what is wrong with it.
func decode(w http.ResponseWriter, r *http.Request, v any) bool {
	d := json.NewDecoder(r.Body)
	d.DisallowUnknownFields()
	err := d.Decode(v)
	if err == nil {
		if _, more := d.Token(); more != io.EOF {
			err = errors.New("more than one JSON object")
			var large *http.MaxBytesError
			if errors.As(more, &large) {
				err = more
			}
		}
	}
	var large *http.MaxBytesError
	switch {
	case err == nil:
		return true
	case errors.As(err, &large):
		refuse(w, http.StatusRequestEntityTooLarge, fmt.Errorf("the body has more than %d bytes", mostBody))
	default:
		refuse(w, http.StatusBadRequest, fmt.Errorf("the body: %w", err))
	}
	return false
}

func identity(d Desk) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		var q struct {
			Local   *float64 `json:"local_tone_hz"`
			Carrier *float64 `json:"carrier_tone_hz"`
			Swap    bool     `json:"swap"`
			Forget  bool     `json:"forget"`
		}
		if !decode(w, r, &q) {
			return
		}
		var claim dsp.Claim
		hz, n := 0.0, 0
		for _, c := range []struct {
			said  bool
			claim dsp.Claim
			hz    *float64
		}{{q.Local != nil, dsp.LocalIs, q.Local}, {q.Carrier != nil, dsp.CarrierIs, q.Carrier}, {q.Swap, dsp.Swap, nil}, {q.Forget, dsp.Forget, nil}} {
			if !c.said {
				continue
			}
			n++
			claim = c.claim
			if c.hz != nil {
				hz = *c.hz
			}
		}
		if n != 1 {
			refuse(w, http.StatusBadRequest, errors.New(`say one of {"local_tone_hz": HZ}, {"carrier_tone_hz": HZ}, {"swap": true}, {"forget": true}`))
			return
		}
		settled, err := d.Declare(r.PathValue("name"), claim, hz)
		if err != nil {
			refuse(w, codeOf(err), err)
			return
		}
		answer(w, http.StatusOK, map[string]string{"settled": settled})
	}
}

func takeStep(d Desk) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		var q struct {
			Step string `json:"step"`
		}
		if !decode(w, r, &q) {
			return
		}
		var p dsp.Progress
		var err error
		switch name := r.PathValue("name"); q.Step {
		case string(dsp.PullWire), string(dsp.MoveDial):
			p, err = d.Ask(name, dsp.Step(q.Step))
		case "cancel":
			p, err = d.Cancel(name)
		default:
			refuse(w, http.StatusBadRequest, fmt.Errorf("step %q: must be pull-wire, move-dial or cancel", q.Step))
			return
		}
		answerStep(w, p, err)
	}
}

func answerStep(w http.ResponseWriter, p dsp.Progress, err error) {
	if err != nil {
		refuse(w, codeOf(err), err)
		return
	}
	answer(w, http.StatusOK, struct {
		Step  dsp.Step  `json:"step,omitempty"`
		Stage dsp.Stage `json:"stage"`
		Text  string    `json:"text,omitempty"`
		Left  dsp.Num   `json:"left_s"`
		Over  bool      `json:"over"`
	}{p.Step, p.Stage, p.Text, dsp.Num(p.Left), p.Over()})
}

// codeOf returns the status for an error of a Desk: what the user asks for may be
// sound, and yet not be possible now.
func codeOf(err error) int {
	switch {
	case errors.Is(err, ErrNoBench):
		return http.StatusNotFound
	case errors.Is(err, ErrBusy):
		return http.StatusServiceUnavailable
	}
	return http.StatusConflict
}

func refuse(w http.ResponseWriter, code int, err error) {
	answer(w, code, map[string]string{"error": err.Error()})
}

func answer(w http.ResponseWriter, code int, v any) {
	w.Header().Set("Content-Type", "application/json")
	w.WriteHeader(code)
	json.NewEncoder(w).Encode(v) // a reader that has gone away does not matter
}

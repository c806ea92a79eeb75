package web

import (
	"fmt"
	"html/template"
	"math"
	"net/http"
	"strings"
	"time"

	"offbeat/dsp"
	"offbeat/metrics"
)

// Page is the daemon's page: each bench with its last reading.
func Page(e *metrics.Exporter, version string) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		w.Header().Set("Content-Type", "text/html; charset=utf-8")
		type row struct {
			Name, State, Far, Why, Offset, Carrier, Local, Flags string
			Info                                                 metrics.BenchInfo
		}
		var rows []row
		for _, name := range e.Names() {
			b := e.Of(name)
			if b == nil {
				continue
			}
			out := row{Name: name, Info: b.Info()}
			rd, age, any := b.Last()
			switch {
			case !any:
				out.State, out.Why = "waiting", "no reading yet"
			case age > metrics.StaleAfter:
				out.State, out.Why = "no readings", fmt.Sprintf("the last one came %v ago", age.Round(time.Second))
			default:
				out.State, out.Why = string(rd.State), rd.Why
				out.Far, out.Offset = far(&rd), offset(&rd)
				out.Carrier, out.Local = tone(rd.CarrierTone, rd.CarrierCN0), tone(rd.LocalTone, rd.LocalCN0)
				var f []string
				for _, g := range rd.Flags {
					f = append(f, string(g))
				}
				out.Flags = strings.Join(f, ", ")
			}
			rows = append(rows, out)
		}
		if err := page.Execute(w, map[string]any{"Rows": rows, "Version": version, "At": time.Now().UTC().Format("2006-01-02 15:04:05 UTC")}); err != nil {
			return // the reader went away
		}
	})
}

// far says how far off in words and digits that the uncertainty deserves.
func far(r *dsp.Reading) string {
	digits := 3
	if r.BeatU > 0 {
		digits = max(0, min(7, int(math.Ceil(-math.Log10(r.BeatU)))+1))
	}
	switch {
	case !math.IsNaN(r.Error):
		side := "high: lower it"
		if r.Error < 0 {
			side = "low: raise it"
		}
		return fmt.Sprintf("%+.*f Hz, %s", digits, r.Error, side)
	case !math.IsNaN(r.BeatAbs):
		return fmt.Sprintf("%.*f Hz to one side or the other", digits, r.BeatAbs)
	case !math.IsNaN(r.BeatWithin):
		return fmt.Sprintf("zero beat within ±%.2g Hz", r.BeatWithin)
	}
	return "not known now"
}

func offset(r *dsp.Reading) string {
	if math.IsNaN(r.Offset) {
		return ""
	}
	return fmt.Sprintf("%+.3g, received to ±%.1g (k = 1)", r.Offset, r.OffsetU)
}

func tone(f, cn0 float64) string {
	if math.IsNaN(f) {
		return "—"
	}
	return fmt.Sprintf("%.2f Hz, %.0f dB-Hz", f, cn0)
}

var page = template.Must(template.New("page").Parse(`<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="refresh" content="2">
<title>offbeat</title>
<style>
:root { color-scheme: light dark; --paper: #f6f1e5; --ink: #23211c; --faint: #6d675a; --rule: #cfc6b1; --teal: #0b6b6b; --amber: #9a5b00; }
@media (prefers-color-scheme: dark) { :root { --paper: #1c1b18; --ink: #ece5d6; --faint: #a49c8a; --rule: #48443a; --teal: #5fc4c0; --amber: #eeb04e; } }
body { margin: 0 auto; padding: 2rem 1.25rem 4rem; max-width: 60rem; background: var(--paper); color: var(--ink); font: 1.05rem/1.5 Georgia, "Times New Roman", serif; }
h1 { font-size: 1.2rem; font-weight: normal; letter-spacing: .04em; margin: 0 0 1.5rem; }
article { border-top: 2px solid var(--ink); padding: 1rem 0 1.5rem; }
h2 { font-size: 1.1rem; margin: 0; }
.far { font-size: clamp(2rem, 7vw, 4rem); line-height: 1.15; margin: .4rem 0; font-variant-numeric: tabular-nums; }
dl { display: grid; grid-template-columns: max-content 1fr; gap: .15rem 1.2rem; margin: .8rem 0 0; }
dt { color: var(--faint); } dd { margin: 0; font-variant-numeric: tabular-nums; }
.mark { display: inline-block; width: .7em; height: .7em; margin-right: .5em; box-sizing: border-box; }
.carrier { border: .16em solid var(--teal); border-radius: 50%; }
.local { background: var(--amber); transform: rotate(45deg) scale(.85); }
footer { border-top: 1px solid var(--rule); padding-top: 1rem; color: var(--faint); font-size: .95rem; }
a { color: inherit; }
</style>
</head>
<body>
<h1>offbeat &middot; {{.At}}</h1>
<main>
{{range .Rows}}<article>
<h2>{{.Name}}</h2>
<p class="far">{{if .Far}}{{.Far}}{{else}}{{.State}}{{end}}</p>
{{if .Offset}}<p>offset {{.Offset}}</p>{{end}}
<dl>
<dt>state</dt><dd>{{.State}}{{if .Why}}: {{.Why}}{{end}}</dd>
{{if .Carrier}}<dt><span class="mark carrier"></span>carrier</dt><dd>{{.Carrier}}</dd>
<dt><span class="mark local"></span>local</dt><dd>{{.Local}}</dd>{{end}}
{{if .Flags}}<dt>trust it less</dt><dd>{{.Flags}}</dd>{{end}}
<dt>hook-up</dt><dd>{{.Info.Hookup}}, {{.Info.Sideband}}; {{.Info.Input}}</dd>
</dl>
</article>
{{else}}<p>No bench.</p>
{{end}}</main>
<footer>
<p><a href="metrics">metrics</a> &middot; <a href="healthz">health</a> &middot; <a href="readyz">readiness</a> &middot; offbeat {{.Version}}</p>
<p>Before a screwdriver goes in: mains voltage and hot ovens live inside instruments, aerials invite lightning, and the local's signal must never be radiated on a protected band. Local codes and licensed practice come first.</p>
</footer>
</body>
</html>
`))

//go:build deps

package offbeat

import (
	_ "github.com/goccy/go-yaml"
	_ "github.com/gordonklaus/portaudio"
	_ "github.com/mewkiz/flac"
	_ "github.com/mjibson/go-dsp/fft"
	_ "github.com/mjibson/go-dsp/window"
	_ "github.com/prometheus/client_golang/prometheus"
	_ "github.com/prometheus/client_golang/prometheus/collectors"
	_ "github.com/prometheus/client_golang/prometheus/promhttp"
	_ "github.com/prometheus/client_golang/prometheus/testutil"
	_ "github.com/prometheus/common/expfmt"
	_ "github.com/prometheus/exporter-toolkit/web"
	_ "golang.org/x/sys/unix"
	_ "golang.org/x/term"
	_ "gonum.org/v1/gonum/blas/blas32"
	_ "gonum.org/v1/gonum/dsp/fourier"
	_ "gonum.org/v1/gonum/dsp/window"
	_ "gonum.org/v1/gonum/mat"
	_ "gonum.org/v1/gonum/stat"
	_ "gonum.org/v1/gonum/stat/distuv"
	_ "modernc.org/sqlite"
)

package dsp

import blas "gonum.org/v1/gonum/blas/gonum"

// raw keeps the latest samples of the input since the last gap, for the search
// and for bands that begin in the past.
type raw struct {
	keep    int
	complex bool
	x, q    []float32
	at      int64 // index of x[0]
}

// push takes the samples from index n on.
func (r *raw) push(n int64, x, q []float32) {
	if len(r.x) == 0 {
		r.at = n
	}
	if room := 2 * r.keep; cap(r.x) < room { // once, rather than by doubling
		r.x = make([]float32, 0, room+room/8)
		if r.complex {
			r.q = make([]float32, 0, room+room/8)
		}
	}
	if len(r.x)+len(x) > 2*r.keep && len(r.x) > r.keep {
		cut := len(r.x) - r.keep
		r.x = r.x[:copy(r.x, r.x[cut:])]
		if r.complex {
			r.q = r.q[:copy(r.q, r.q[cut:])]
		}
		r.at += int64(cut)
	}
	r.x = append(r.x, x...)
	if r.complex {
		r.q = append(r.q, q...)
	}
}

func (r *raw) drop() { r.x, r.q = r.x[:0], r.q[:0] }

// first returns the index of the first sample kept.
func (r *raw) first() int64 { return r.at }

// tail returns the samples before index upto, at most the latest n of them.
func (r *raw) tail(upto int64, n int) (x, q []float32) {
	end := max(0, min(len(r.x), int(upto-r.at)))
	from := max(0, end-n)
	if r.complex {
		q = r.q[from:end]
	}
	return r.x[from:end], q
}

// prime fills a new band with everything that is kept.
func (r *raw) prime(b *band) {
	if len(r.x) > 0 {
		b.restart(r.at)
		b.push(r.x, r.q)
	}
}

// dotSelf returns the sum of squares of x, at most a few hundred samples.
func dotSelf(x []float32) float64 {
	var d blas.Implementation
	return float64(d.Sdot(len(x), x, 1, x, 1))
}

package main

import (
	"math"
	"sort"
)

// errs collects errors with their stated uncertainties.
type errs struct {
	d, u []float64
}

func (e *errs) add(d, u float64) {
	if !math.IsNaN(d) && !math.IsNaN(u) {
		e.d, e.u = append(e.d, d), append(e.u, u)
	}
}

func (e *errs) n() int { return len(e.d) }

// rms error, Hz.
func (e *errs) rms() float64 { return rms(e.d) }

// honest returns the rms of error over stated uncertainty.
func (e *errs) honest() float64 {
	var q []float64
	for i := range e.d {
		q = append(q, e.d[i]/e.u[i])
	}
	return rms(q)
}

// within returns the percentage of errors within k times the uncertainty.
func (e *errs) within(k float64) float64 {
	n := 0
	for i := range e.d {
		if math.Abs(e.d[i]) <= k*e.u[i] {
			n++
		}
	}
	return 100 * float64(n) / float64(max(1, len(e.d)))
}

func (e *errs) medianU() float64 { return median(e.u) }

func (e *errs) medianSize() float64 {
	var v []float64
	for _, d := range e.d {
		v = append(v, math.Abs(d))
	}
	return median(v)
}

func rms(v []float64) float64 {
	if len(v) == 0 {
		return math.NaN()
	}
	s := 0.0
	for _, x := range v {
		s += x * x
	}
	return math.Sqrt(s / float64(len(v)))
}

func median(v []float64) float64 {
	if len(v) == 0 {
		return math.NaN()
	}
	v = append([]float64(nil), v...)
	sort.Float64s(v)
	return v[len(v)/2]
}

func percent(n, of int) float64 { return 100 * float64(n) / float64(max(1, of)) }

// lineBound is the bound of Rife & Boorstyn (IEEE Trans. IT-20, 1974) on the
// frequency of one line, Hz.
func lineBound(cn0dB, span float64) float64 {
	return math.Sqrt(6) / (2 * math.Pi) / math.Sqrt(math.Pow(10, cn0dB/10)) / math.Pow(span, 1.5)
}

// spreadLimit is the standard deviation of the pulse-pair mean frequency of a
// Gaussian Doppler spectrum of rms width sigma over a span, Hz (Zrnic 1977;
// from memory, reproduced numerically in the project's tests).
func spreadLimit(sigma, span float64) float64 {
	return math.Sqrt(sigma / (4 * math.Sqrt(math.Pi) * span))
}

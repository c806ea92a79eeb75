package main

import (
	"errors"
	"fmt"
	"image/color"
	"math"
	"os"
	"path/filepath"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

// parsePicture takes the name of a picture.
func parsePicture(s string) (string, error) {
	switch strings.ToLower(filepath.Ext(s)) {
	case ".svg", ".png":
		return s, nil
	}
	return "", fmt.Errorf("%s: must end in .svg or .png", quoted(s))
}

var (
	ink   = color.NRGBA{0x22, 0x28, 0x2c, 0xff}
	teal  = color.NRGBA{0x0b, 0x7a, 0x75, 0xff}
	faint = color.NRGBA{0x22, 0x28, 0x2c, 0x22}
)

// points is the overlapping Allan deviations and their limits.
type points struct {
	plotter.XYs
	plotter.YErrors
}

// drawPlot draws the overlapping Allan deviation with its limits, both axes
// logarithmic.
func drawPlot(file string, r *row, rows []tauRow, confidence float64) error {
	var p points
	low, high := math.Inf(1), 0.0
	for _, t := range rows {
		y := float64(t.Oadev)
		if !(y > 0) {
			continue
		}
		p.XYs = append(p.XYs, plotter.XY{X: float64(t.Tau), Y: y})
		e := struct{ Low, High float64 }{}
		if lo, hi := float64(t.Low), float64(t.High); lo > 0 && !math.IsInf(hi, 0) {
			e.Low, e.High = y-lo, hi-y
		}
		p.YErrors = append(p.YErrors, e)
		low, high = min(low, y-e.Low), max(high, y+e.High)
	}
	if len(p.XYs) == 0 {
		return errors.New("there is nothing to draw: no deviation is more than 0")
	}
	pl := plot.New()
	pl.Title.Text = strings.ToValidUTF8(oneLine(r.name), "?")
	pl.X.Label.Text, pl.Y.Label.Text = "averaging time, s", fmt.Sprintf("Allan deviation, limits %.3g %%", confidence*100)
	pl.X.Min, pl.X.Max = decades(p.XYs[0].X, p.XYs[len(p.XYs)-1].X)
	pl.Y.Min, pl.Y.Max = decades(low, high)
	for _, a := range []*plot.Axis{&pl.X, &pl.Y} {
		a.Scale, a.Tick.Marker = plot.LogScale{}, plot.LogTicks{Prec: -1}
		a.LineStyle.Color, a.Tick.LineStyle.Color = ink, ink
		a.Padding = vg.Points(6)
		a.Label.Padding = vg.Points(6)
	}
	pl.Title.Padding = vg.Points(10)
	grid := plotter.NewGrid()
	grid.Horizontal.Color, grid.Vertical.Color = faint, faint
	line, err := plotter.NewLine(p)
	if err != nil {
		return err
	}
	line.Color, line.Width = teal, vg.Points(1)
	marks, err := plotter.NewScatter(p)
	if err != nil {
		return err
	}
	marks.GlyphStyle = draw.GlyphStyle{Color: teal, Radius: vg.Points(2.6), Shape: draw.CircleGlyph{}}
	bars, err := plotter.NewYErrorBars(p)
	if err != nil {
		return err
	}
	bars.Color, bars.Width, bars.CapWidth = ink, vg.Points(.8), vg.Points(5)
	pl.Add(grid, bars, line, marks)
	return save(pl, file)
}

// save writes the picture whole or not at all.
func save(pl *plot.Plot, file string) error {
	w, err := pl.WriterTo(17*vg.Centimeter, 12*vg.Centimeter, strings.ToLower(filepath.Ext(file))[1:])
	if err != nil {
		return err
	}
	f, err := os.Create(file)
	if err != nil {
		return fileError(file, err)
	}
	if _, err := w.WriteTo(f); err != nil {
		f.Close()
		return fileError(file, err)
	}
	return f.Close()
}

// decades returns the powers of ten around a range.
func decades(low, high float64) (float64, float64) {
	a, b := math.Floor(math.Log10(low)+1e-9), math.Ceil(math.Log10(high)-1e-9)
	if b <= a {
		b = a + 1
	}
	return math.Pow(10, a), math.Pow(10, b)
}

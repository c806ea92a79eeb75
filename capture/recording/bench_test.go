package recording

import (
	"io"
	"os"
	"path/filepath"
	"testing"

	"offbeat/capture"
)

// drain reads src to its end and returns the samples per channel.
func drain(tb testing.TB, src capture.Source, b *capture.Block) int64 {
	n := int64(0)
	for {
		err := src.Read(b)
		if err == io.EOF {
			return n
		}
		if err != nil {
			tb.Fatal(err)
		}
		n += int64(b.Len())
	}
}

// BenchmarkFile reads and decodes twenty minutes of 48 kHz mono, by encoding,
// from a file in the page cache. ns/sample is what counts.
func BenchmarkFile(b *testing.B) {
	const seconds, rate = 1200, 48000
	for _, name := range []string{"s16le", "s24le", "s32le", "f32le"} {
		for _, channels := range []int{1, 2} {
			b.Run(name+"/"+string(rune('0'+channels))+"ch", func(b *testing.B) {
				enc := rawEncodings[name]
				path := filepath.Join(b.TempDir(), "x.raw")
				f, err := os.Create(path)
				if err != nil {
					b.Fatal(err)
				}
				size := int64(seconds * rate * enc.width * channels)
				chunk := make([]byte, 1<<20)
				for i := range chunk {
					chunk[i] = byte(i*7) & 0x3F
				}
				for n := size; n > 0; n -= int64(len(chunk)) {
					if _, err := f.Write(chunk[:min(n, int64(len(chunk)))]); err != nil {
						b.Fatal(err)
					}
				}
				f.Close()
				opt := Options{Raw: &RawFormat{Encoding: name, Rate: rate, Channels: channels}}
				if channels == 2 {
					opt.Channels = []int{1, 2}
				}
				var blk capture.Block
				b.SetBytes(size)
				b.ReportAllocs()
				b.ResetTimer()
				for range b.N {
					src, err := Open(path, opt)
					if err != nil {
						b.Fatal(err)
					}
					if n := drain(b, src, &blk); n != seconds*rate {
						b.Fatal(n)
					}
					src.Close()
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(seconds*rate*channels), "ns/sample")
			})
		}
	}
}

// BenchmarkDecode runs the loops alone, on one block in the cache.
func BenchmarkDecode(b *testing.B) {
	for _, enc := range []encoding{encU8, encS16, encS24, encS32, encF32, encF64} {
		for _, channels := range []int{1, 2} {
			b.Run(enc.name+"/"+string(rune('0'+channels))+"ch", func(b *testing.B) {
				src := make([]byte, 4096*enc.width*channels)
				for i := range src {
					src[i] = byte(i*7) & 0x3F
				}
				dst := make([]float32, 4096)
				for range b.N {
					enc.decode(dst, src, enc.width*channels)
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/4096, "ns/sample")
			})
		}
	}
}

// BenchmarkFLAC decodes a minute of 48 kHz 16-bit mono, a tone in noise.
func BenchmarkFLAC(b *testing.B) {
	const n = 60 * 48000
	wav, _ := tune(b, 48000, 1, 16, 16, n)
	path := file(b, flacOf(b, wav))
	var blk capture.Block
	b.ReportAllocs()
	b.ResetTimer()
	for range b.N {
		src, err := Open(path, Options{})
		if err != nil {
			b.Fatal(err)
		}
		if got := drain(b, src, &blk); got != n {
			b.Fatal(got)
		}
		src.Close()
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/n, "ns/sample")
}

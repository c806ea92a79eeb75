// Accuracy measures what the readings are worth: it plays simulated scenes of
// known truth, differently seeded every time, to dsp.Bench and prints every
// figure with its limit beside it.
//
//	accuracy [--scenes 200] [--rows REGEXP] [--seed N] [--workers 2] [--only SEED] [-v]
//
// It exits with 1 when a figure misses its limit.
package main

import (
	"flag"
	"fmt"
	"math/rand/v2"
	"os"
	"regexp"
	"runtime"
)

func main() {
	scenes := flag.Int("scenes", 200, "scenes a row")
	rows := flag.String("rows", "", "only rows whose name matches")
	seed := flag.Uint64("seed", 0, "of all scenes; 0: another one every time")
	workers := flag.Int("workers", runtime.NumCPU(), "scenes at a time")
	only := flag.Uint64("only", 0, "play only the scene of this Seed, as -v prints it")
	verbose := flag.Bool("v", false, "print the worst scenes of every row")
	flag.Parse()
	which, err := regexp.Compile(*rows)
	if err != nil {
		fmt.Fprintln(os.Stderr, "accuracy: --rows:", err)
		os.Exit(2)
	}
	if *seed == 0 {
		*seed = rand.Uint64() >> 32
	}
	fmt.Printf("seed %d, %d scenes a row\n", *seed, *scenes)
	missed, total := 0, 0
	for _, r := range table() {
		if which.MatchString(r.name) {
			m, n := r.run(*seed, *scenes, *workers, *only, *verbose, os.Stdout)
			missed += m
			total += n
		}
	}
	fmt.Printf("%d figures, %d beyond their limits\n", total, missed)
	if missed > 0 {
		os.Exit(1)
	}
}

package bench

import "flag"

var (
	full    = flag.Bool("full", false, "compare at full length, with repetitions")
	sizes   = flag.String("sizes", "", "numbers of inverters to compare at, with commas; empty: 10, or 10,100,1000,10000 with -full")
	plotDir = flag.String("plots", "", "draw the comparison into this folder")
)

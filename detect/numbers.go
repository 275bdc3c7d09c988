package detect

import "slices"

// median and quantile of a short slice; the slice is sorted in place.
func median(x []float64) float64 { return quantile(x, 0.5) }

func quantile(x []float64, p float64) float64 {
	slices.Sort(x)
	return x[min(len(x)-1, int(p*float64(len(x))))]
}

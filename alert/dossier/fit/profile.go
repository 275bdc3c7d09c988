package fit

import "math"

// Profile compares versions of the same windows that differ in OP, such as OP as
// it comes through a play of different width: for each, how much less likely the
// best model of a kind makes the data than that of the likeliest version (twice
// the logarithm of the ratio; residuals whitened by one model for all). What is
// under [Within] belongs to the 90 % range of whatever the versions differ in.
func Profile(versions [][]Window, k Kind, o Options) ([]float64, error) {
	es := make([]*engine, len(versions))
	shapes := make([]*shape, len(versions))
	best, least := 0, math.Inf(1)
	for i, ws := range versions {
		e, err := newEngine(ws, o)
		if err != nil {
			return nil, err
		}
		s := &shape{kind: k}
		if i > 0 {
			s.at = append([]float64(nil), shapes[i-1].at...)
		}
		e.search(s)
		es[i], shapes[i] = e, s
		if q := e.sums(k, s.at).sse(); q < least {
			best, least = i, q
		}
	}
	es[best].colour(shapes[best])
	es[best].search(shapes[best])
	es[best].colour(shapes[best])
	out := make([]float64, len(versions))
	least = math.Inf(1)
	for i, e := range es {
		e.ar = es[best].ar
		e.filter()
		e.search(shapes[i])
		q := e.sums(k, shapes[i].at)
		out[i] = float64(q.n) * math.Log(q.sse()+1e-30)
		least = math.Min(least, out[i])
	}
	for i := range out {
		out[i] -= least
	}
	return out, nil
}

// Within bounds the 90 % range of a [Profile].
const Within = chi90

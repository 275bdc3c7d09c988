package detect

import (
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// crowd makes a site of n loops, of which a share cycles, each with a period of its own between
// 10 s and 3 h and a phase that is kept but for a jitter.
func crowd(n int, share float64, end int64) ([]*configs.Loop, []SiteEvidence) {
	r := rand.New(rand.NewPCG(1, 2))
	loops := make([]*configs.Loop, n)
	var live []SiteEvidence
	for i := range loops {
		loops[i] = configs.NewLoop(fmt.Sprintf("FIC-%05d", i))
		if r.Float64() >= share {
			continue
		}
		e := Evidence{Slot: end, Live: true, PeriodS: 10 * math.Exp(r.Float64()*math.Log(1080)), Regular: 3 + 8*r.Float64(), Amp: 1, Shape: r.Float64(), Cause: Undetermined}
		e.Since = end - int64(1000*e.PeriodS*(10+500*r.Float64()))
		t := float64(end)/1000 - r.Float64()*e.PeriodS
		for e.N = 0; e.N < evidenceCrossings; e.N++ {
			e.Cross[e.N] = t
			t -= e.PeriodS / 2 * (1 + 0.2*(r.Float64()-0.5))
		}
		live = append(live, SiteEvidence{collector.LoopID(i), e})
	}
	return loops, live
}

// BenchmarkSlot is one slot of a whole site.
func BenchmarkSlot(b *testing.B) {
	const end = 1767225600000
	for _, n := range []int{2000, 10000} {
		for _, share := range []float64{0.1, 1} {
			b.Run(fmt.Sprintf("%d loops, %.0f %% cycle", n, 100*share), func(b *testing.B) {
				loops, live := crowd(n, share, end)
				s := NewSites(loops)
				at := int64(end)
				for b.Loop() {
					for i := range live {
						live[i].Slot = at
						s.Record(live[i].ID, live[i].Evidence)
					}
					s.Slot(at, func(*Finding) {})
					at += SiteSlotMs
				}
			})
		}
	}
}

// plainPhase compares every crossing with every other.
func plainPhase(a, b *Evidence, sign int) (r float64, n int) {
	var re, im [2]float64
	for i := range a.N {
		best := math.Inf(1)
		for j := (i + sign) % 2; j < b.N; j += 2 {
			if d := a.Cross[i] - b.Cross[j]; math.Abs(d) < math.Abs(best) {
				best = d
			}
		}
		if math.Abs(best) < a.PeriodS {
			x := 4 * math.Pi * best / a.PeriodS
			re[i&1] += math.Cos(x)
			im[i&1] += math.Sin(x)
			n++
		}
	}
	if n == 0 {
		return 0, 0
	}
	return (math.Hypot(re[0], im[0]) + math.Hypot(re[1], im[1])) / float64(n), n
}

// What is left out of the comparison of all loops with all changes nothing of it.
func TestBesideIsThatOfAllPairs(t *testing.T) {
	const end = 1767225600000
	loops, live := crowd(500, 0.8, end)
	for i := 20; i < len(live); i += 3 { // some that swing with another, read as a period near its own
		e, of := &live[i].Evidence, &live[i-17].Evidence
		e.Cross, e.PeriodS = of.Cross, of.PeriodS*[3]float64{0.7, 1, 1.6}[i%3]
		if i%2 == 0 {
			e.Since = of.Since + int64(5000*e.PeriodS)
		}
		loops[live[i].ID].Inner = loops[live[i-20].ID].Name
	}
	s := newShared(loops).(*shared)
	want := map[string]string{}
	for i := range live {
		for j := range live {
			a, b := &live[i], &live[j]
			for sign := range 2 {
				for _, least := range []float64{0, 0.6, 0.75} {
					r, n := plainPhase(&a.Evidence, &b.Evidence, sign)
					if q, m := phaseOfSign(&a.Evidence, &b.Evidence, sign, least); r > least && (q != r || m != n) || r <= least && q > least {
						t.Fatalf("%d and %d, over %v: %v of %d, want %v of %d", i, j, least, q, m, r, n)
					}
				}
			}
			x, y := loops[a.ID], loops[b.ID]
			if want[x.Name] == "" && i != j && mayBeOne(a.PeriodS, b.PeriodS) && !s.cascaded(x.Name, y.Name) && mayShare(end, a, b) {
				want[x.Name] = y.Name
			}
		}
	}
	if got := s.beside(end, live, byPeriod(live)); len(want) < 150 || !maps.Equal(got, want) {
		t.Errorf("%d beside another, want %d", len(got), len(want))
	}
}

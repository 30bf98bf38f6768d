package posterior

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"pgregory.net/rapid"
)

var families = []Family{NormalFamily, LognormalFamily, BinomialFamily, PoissonFamily}

// drawn is one observation at a time.
type drawn struct {
	value, of float64
	at        int64
}

// observations are random ones of a family, in an order of time that late ones break.
func observations(t *rapid.T, f Family, most int) []drawn {
	all := make([]drawn, rapid.IntRange(0, most).Draw(t, "observations"))
	now := int64(1e18)
	for i := range all {
		now += rapid.Int64Range(0, int64(2*time.Minute)).Draw(t, "pause")
		late := int64(0)
		if rapid.IntRange(0, 9).Draw(t, "is late") == 0 {
			late = rapid.Int64Range(0, int64(90*time.Minute)).Draw(t, "late")
		}
		all[i] = drawn{of: 1, at: now - late}
		switch f {
		case NormalFamily:
			all[i].value = rapid.Float64Range(-10, 10).Draw(t, "value")
		case LognormalFamily:
			all[i].value = rapid.Float64Range(1e-5, 10).Draw(t, "value")
		default:
			all[i].of = float64(rapid.IntRange(1, 50).Draw(t, "of"))
			all[i].value = float64(rapid.IntRange(0, int(all[i].of)).Draw(t, "value"))
		}
	}
	return all
}

func (m *Memory) take(all []drawn) {
	var values, of []float64
	var at []int64
	for _, o := range all {
		values, of, at = append(values, o.value), append(of, o.of), append(at, o.at)
	}
	m.AddBatch(values, of, at)
}

func reloaded(t rapid.TB, m *Memory) *Memory {
	saved, err := m.AppendBinary(nil)
	if err != nil {
		t.Fatal(err)
	}
	loaded := NewMemory(m.family, m.remember)
	if err := loaded.UnmarshalBinary(saved); err != nil {
		t.Fatal(err)
	}
	if again, _ := loaded.AppendBinary(nil); !slices.Equal(again, saved) {
		t.Fatal("a loaded memory saves other bytes")
	}
	return loaded
}

// sumOfAll adds observations one by one.
func sumOfAll(f Family, all []drawn) (s Sums) {
	for _, o := range all {
		s = s.Add(f, o.value, o.of)
	}
	return s
}

func same(a, b Sums) bool {
	return a.N == b.N && a.Total == b.Total && math.Abs(a.Exposure-b.Exposure) <= 1e-12*b.Exposure &&
		ulps(a.Mean, b.Mean) <= 1 && ulps(a.SS, b.SS) <= 1
}

// Whatever the batches, and however often a memory is saved and loaded on the way, the same
// observations give the same bits: those of one go. And what counts is the last N, or what the
// window of time has not left behind.
func TestMemoryReload(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		f := rapid.SampledFrom(families).Draw(t, "family")
		r := rapid.SampledFrom([]Remember{{Segment: true}, {Units: 2}, {Units: 63}, {Units: 64}, {Units: 200}, {Hours: 0.5}, {Hours: 1}}).Draw(t, "remember")
		all := observations(t, f, 400)
		whole, split := NewMemory(f, r), NewMemory(f, r)
		whole.take(all)
		for rest := all; len(rest) > 0; {
			n := rapid.IntRange(0, min(len(rest), 90)).Draw(t, "batch")
			split.take(rest[:n])
			rest = rest[n:]
			if rapid.Bool().Draw(t, "restart") {
				split = reloaded(t, split)
			}
		}
		if whole.Sums() != split.Sums() {
			t.Fatalf("%+v in one go, %+v in batches with restarts", whole.Sums(), split.Sums())
		}
		want := sumOfAll(f, inWindow(r, all))
		if !same(whole.Sums(), want) {
			t.Fatalf("%+v, want %+v", whole.Sums(), want)
		}
	})
}

// Long windows, through many chunks: every 12 observations a batch, now and then a restart.
func TestWindowSlides(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 0))
	for _, f := range families {
		for _, n := range []int{2, 63, 64, 65, 127, 128, 200, 1000} {
			r := Remember{Units: n}
			m := NewMemory(f, r)
			var all []drawn
			for i := range 300 {
				batch := make([]drawn, 1+random.IntN(23))
				for j := range batch {
					of := 1 + random.IntN(40)
					batch[j] = drawn{value: float64(1 + random.IntN(of)), of: float64(of)}
				}
				all = append(all, batch...)
				m.take(batch)
				if i%7 == 0 {
					m = reloaded(t, m)
				}
				if s, want := m.Sums(), sumOfAll(f, inWindow(r, all)); !same(s, want) {
					t.Fatalf("%s, the last %d of %d: %+v, want %+v", f, n, len(all), s, want)
				}
			}
			whole := NewMemory(f, r)
			whole.take(all)
			if whole.Sums() != m.Sums() {
				t.Fatalf("%s, the last %d: %+v, in one go %+v", f, n, m.Sums(), whole.Sums())
			}
		}
	}
}

// inWindow are the observations that count, found the plain way.
func inWindow(r Remember, all []drawn) (in []drawn) {
	if r.Units > 0 {
		return all[max(0, len(all)-r.Units):]
	}
	if r.Hours == 0 {
		return all
	}
	width := int64(r.Hours * float64(time.Hour) / 240)
	latest := int64(math.MinInt64)
	for _, o := range all {
		latest = max(latest, o.at)
	}
	for _, o := range all {
		if latest/width-o.at/width < 240 {
			in = append(in, o)
		}
	}
	return in
}

// Under a discount too, a memory that was loaded goes on as one that was not; what was there
// before a batch weighs less by the factor.
func TestDiscountGoesOnAfterLoading(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		f := rapid.SampledFrom(families).Draw(t, "family")
		r := Remember{Discount: rapid.Float64Range(0.5, 0.999).Draw(t, "discount")}
		one, other := NewMemory(f, r), NewMemory(f, r)
		var want Sums
		for range rapid.IntRange(1, 8).Draw(t, "batches") {
			batch := observations(t, f, 20)
			one.take(batch)
			other = reloaded(t, other)
			other.take(batch)
			want = Merge(f, want.Scale(r.Discount), sumOfAll(f, batch))
		}
		if one.Sums() != other.Sums() || one.Sums() != want {
			t.Fatalf("%+v, after loading %+v, want %+v", one.Sums(), other.Sums(), want)
		}
	})
}

func TestTimeGoesOn(t *testing.T) {
	hour := int64(time.Hour)
	m := NewMemory(NormalFamily, Remember{Hours: 24})
	start := 500000 * hour
	m.AddBatch([]float64{1, 2, 3}, nil, []int64{start, start + hour, start + 30*hour})
	if s := m.Sums(); s.N != 1 || s.Mean != 3 {
		t.Errorf("%+v, want the last one alone", s)
	}
	m.AddBatch([]float64{9}, nil, []int64{start})
	if s := m.Sums(); s.N != 1 {
		t.Errorf("%+v: a measurement older than the window on arrival counts", s)
	}
	m.AddBatch([]float64{9, 5}, nil, []int64{start + 6*hour, start + 6*hour + hour/10})
	if s := m.Sums(); s.N != 2 || s.Mean != 4 {
		t.Errorf("%+v: the window begins 239 steps of 6 minutes before the step of the latest", s)
	}
	m.Pass(start + 31*hour)
	if m.Pass(start + 54*hour - 1) {
		t.Error("something was forgotten within the window")
	}
	if !m.Pass(start+54*hour) || m.Sums().N != 0 {
		t.Errorf("%+v after the window has passed", m.Sums())
	}
	if m.Pass(start + 99*hour) {
		t.Error("nothing was there to forget")
	}
	old := NewMemory(NormalFamily, Remember{Hours: 24})
	old.AddBatch([]float64{1, 2}, nil, []int64{-5 * hour, -hour})
	if old.Sums().N != 2 {
		t.Errorf("%+v before 1970", old.Sums())
	}
	if NewMemory(NormalFamily, Remember{Units: 5}).Pass(start) {
		t.Error("a window of units forgets by time")
	}
}

func TestStartSegment(t *testing.T) {
	for _, r := range []Remember{{Segment: true}, {Units: 3}, {Hours: 24}, {Discount: 0.5}} {
		m := NewMemory(NormalFamily, r)
		m.AddBatch([]float64{1, 2, 3, 4}, nil, []int64{1, 2, 3, 4})
		m.Sums()
		m.StartSegment()
		if m.Sums() != (Sums{}) {
			t.Errorf("%+v: %+v after a new segment", r, m.Sums())
		}
		m.AddBatch([]float64{5, 7}, nil, []int64{5, 6})
		if s := m.Sums(); s.N != 2 || s.Mean != 6 {
			t.Errorf("%+v: %+v in the new segment", r, s)
		}
	}
}

func TestRememberIsChecked(t *testing.T) {
	for _, c := range []struct {
		r  Remember
		ok bool
	}{
		{Remember{Segment: true}, true}, {Remember{}, false}, {Remember{Segment: true, Units: 5}, false},
		{Remember{Units: 2}, true}, {Remember{Units: 1}, false}, {Remember{Units: 20000}, true}, {Remember{Units: 20001}, false}, {Remember{Units: -5}, false},
		{Remember{Hours: 0.5}, true}, {Remember{Hours: -1}, false}, {Remember{Hours: 9000}, false}, {Remember{Hours: math.NaN()}, false},
		{Remember{Discount: 0.99}, true}, {Remember{Discount: 1}, false}, {Remember{Discount: -0.1}, false}, {Remember{Discount: math.NaN()}, false},
	} {
		if err := c.r.Check(); (err == nil) != c.ok {
			t.Errorf("%+v: %v", c.r, err)
		}
	}
}

func TestSpoiledMemoryIsRefused(t *testing.T) {
	for _, r := range []Remember{{Segment: true}, {Units: 5}, {Hours: 1}} {
		m := NewMemory(LognormalFamily, r)
		m.AddBatch([]float64{1, 2, 3}, nil, []int64{1, 2, 3})
		saved, err := m.AppendBinary(nil)
		if err != nil {
			t.Fatal(err)
		}
		for cut := range saved {
			if err := NewMemory(LognormalFamily, r).UnmarshalBinary(saved[:cut]); err == nil {
				t.Errorf("%+v: the first %d of %d bytes are taken for a memory", r, cut, len(saved))
			}
		}
		if err := NewMemory(LognormalFamily, r).UnmarshalBinary(append(slices.Clone(saved), 0)); err == nil {
			t.Errorf("%+v: a byte too many is taken", r)
		}
		saved[0]++
		if err := NewMemory(LognormalFamily, r).UnmarshalBinary(saved); err == nil {
			t.Errorf("%+v: another version is taken", r)
		}
	}
	m := NewMemory(NormalFamily, Remember{Units: 5})
	m.AddBatch([]float64{-1}, nil, nil)
	saved, _ := m.AppendBinary(nil)
	if err := NewMemory(LognormalFamily, Remember{Units: 5}).UnmarshalBinary(saved); err == nil {
		t.Error("-1 is taken for a lognormal value")
	}
}

func FuzzMemory(f *testing.F) {
	ways := []Remember{{Segment: true}, {Units: 2}, {Units: 63}, {Units: 200}, {Hours: 1}, {Discount: 0.9}}
	for i, r := range ways {
		m := NewMemory(NormalFamily, r)
		m.AddBatch([]float64{1, 2, 3}, []float64{1, 2, 3}, []int64{1, 2, 3})
		b, err := m.AppendBinary(nil)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(byte(i), b)
	}
	f.Fuzz(func(t *testing.T, i byte, b []byte) {
		m := NewMemory(NormalFamily, ways[int(i)%len(ways)])
		if m.UnmarshalBinary(slices.Clone(b)) != nil {
			if m.Sums() != (Sums{}) {
				t.Fatal("something is left of what was refused")
			}
			return
		}
		m.AddBatch([]float64{1}, nil, []int64{5})
		m.Sums()
		saved, err := m.AppendBinary(nil)
		if err != nil {
			t.Fatal(err)
		}
		again := NewMemory(m.family, m.remember)
		if err := again.UnmarshalBinary(saved); err != nil && finiteSums(m.Sums()) {
			t.Fatalf("what was saved is refused: %v", err)
		}
	})
}

// A batch of 12 and the sums after it.
func BenchmarkBatchOf12(b *testing.B) {
	for _, f := range []Family{NormalFamily, LognormalFamily} {
		for _, r := range []Remember{{Segment: true}, {Units: 400}, {Units: 20000}, {Hours: 24}, {Discount: 0.99}} {
			b.Run(fmt.Sprintf("%s/%+v", f, r), func(b *testing.B) {
				m := NewMemory(f, r)
				values, at := make([]float64, 12), make([]int64, 12)
				now := int64(1e18)
				next := func() {
					for i := range values {
						now += int64(time.Minute) / 12
						values[i], at[i] = 33.4+0.62*math.Sin(float64(now)), now
					}
					m.AddBatch(values, nil, at)
				}
				for range 2000 {
					next()
				}
				b.ReportAllocs()
				for b.Loop() {
					next()
					m.Sums()
				}
			})
		}
	}
}

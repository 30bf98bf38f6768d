package store

import (
	"bytes"
	"fmt"
	"math"
	"reflect"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/rules"
)

// fill sets everything that v holds to something other than its zero value, so that a field
// that the record forgets is found: k makes the values differ.
func fill(v reflect.Value, k *int) {
	*k++
	switch v.Kind() {
	case reflect.Pointer:
		v.Set(reflect.New(v.Type().Elem()))
		fill(v.Elem(), k)
	case reflect.Struct:
		if v.Type() == reflect.TypeFor[time.Time]() {
			v.Set(reflect.ValueOf(time.Unix(1_750_000_000, int64(*k)).In(time.FixedZone("elsewhere", 3600))))
			return
		}
		for i := range v.NumField() {
			fill(v.Field(i), k)
		}
	case reflect.Slice:
		v.Set(reflect.MakeSlice(v.Type(), 2, 2))
		fill(v.Index(0), k)
		fill(v.Index(1), k)
	case reflect.Map:
		v.Set(reflect.MakeMap(v.Type()))
		key, value := reflect.New(v.Type().Key()).Elem(), reflect.New(v.Type().Elem()).Elem()
		fill(key, k)
		fill(value, k)
		v.SetMapIndex(key, value)
	case reflect.String:
		v.SetString(fmt.Sprintf("<text %d>", *k))
	case reflect.Bool:
		v.SetBool(true)
	case reflect.Int, reflect.Int64:
		v.SetInt(int64(*k))
	case reflect.Uint64:
		v.SetUint(uint64(*k))
	case reflect.Uint8:
		v.SetUint(uint64(*k % 256))
	case reflect.Float64:
		v.SetFloat(float64(*k) / 7)
	default:
		panic("the test can't fill a " + v.Type().String())
	}
}

// Every field of every kind of event and outcome comes back: one that is added to package
// rules and that the record doesn't hold fails here.
func TestRecordForgetsNoField(t *testing.T) {
	kinds := reflect.TypeFor[rules.Event]()
	for i := range kinds.NumField() {
		if kinds.Field(i).Type.Kind() != reflect.Pointer {
			continue
		}
		t.Run(kinds.Field(i).Name, func(t *testing.T) {
			k := 0
			e := &Entry{Event: rules.Event{Index: 7, At: time.Unix(1, 2)}}
			fill(reflect.ValueOf(&e.Event).Elem().Field(i), &k)
			fill(reflect.ValueOf(&e.Outcomes).Elem(), &k)
			unchanged := fmt.Sprintf("%+v", e.Event.Batch)
			b, err := encode(e)
			if err != nil {
				t.Fatal(err)
			}
			if now := fmt.Sprintf("%+v", e.Event.Batch); now != unchanged {
				t.Error("writing the record changed the entry")
			}
			got, err := decode(b)
			if err != nil {
				t.Fatal(err)
			}
			want := &Entry{}
			want.Event, want.Outcomes = inUTC(e)
			if !reflect.DeepEqual(got, want) {
				t.Errorf("wrote %+v\nread  %+v", want, got)
			}
			for at, zone := range zones(reflect.ValueOf(got), "") {
				if zone != time.UTC {
					t.Errorf("%s is in the zone %v", at, zone)
				}
			}
		})
	}
}

// zones are the zones of all times that v holds.
func zones(v reflect.Value, at string) map[string]*time.Location {
	all := map[string]*time.Location{}
	add := func(v reflect.Value, at string) {
		for k, z := range zones(v, at) {
			all[k] = z
		}
	}
	switch v.Kind() {
	case reflect.Pointer:
		if !v.IsNil() {
			add(v.Elem(), at)
		}
	case reflect.Struct:
		if tm, ok := v.Interface().(time.Time); ok {
			all[at] = tm.Location()
			return all
		}
		for i := range v.NumField() {
			add(v.Field(i), at+"."+v.Type().Field(i).Name)
		}
	case reflect.Slice:
		for i := range v.Len() {
			add(v.Index(i), fmt.Sprintf("%s[%d]", at, i))
		}
	}
	return all
}

// columnsOf draws slices that are nil, empty, or hold what a column meets.
func columnsOf[T any](one *rapid.Generator[T]) *rapid.Generator[[]T] {
	return rapid.OneOf(rapid.Just([]T(nil)), rapid.Just([]T{}), rapid.SliceOfN(one, 1, 40))
}

var (
	anyFloat = rapid.OneOf(rapid.Float64(),
		rapid.Map(rapid.Uint64(), math.Float64frombits), // NaN with any payload, infinities, subnormals
		rapid.SampledFrom([]float64{math.Copysign(0, -1), 0, rules.LogZero, math.MaxFloat64, 1 << 53, 1<<53 + 2, 5e-324}))
	rigFloat = rapid.Custom(func(t *rapid.T) float64 {
		return float64(rapid.Int64Range(-1<<50, 1<<50).Draw(t, "units")) / powers[rapid.IntRange(0, mostPlaces).Draw(t, "places")]
	})
	serial = rapid.Custom(func(t *rapid.T) string {
		n := rapid.OneOf(rapid.IntRange(0, 12), rapid.IntRange(9_990, 10_010), rapid.IntRange(0, math.MaxInt)).Draw(t, "number")
		return fmt.Sprintf(rapid.SampledFrom([]string{"TP-%05d", "%d", "%020d", "%d-x", "L1/%d"}).Draw(t, "form"), n)
	})
	anyText  = rapid.OneOf(serial, rapid.String(), rapid.StringN(0, -1, 600))
	anyBatch = rapid.Custom(func(t *rapid.T) *rules.Batch {
		b := &rules.Batch{Source: rapid.String().Draw(t, "source"), Rows: rules.Rows{
			Line: columnsOf(rapid.Int()).Draw(t, "line"), Time: columnsOf(rapid.Int64()).Draw(t, "time"),
			Serial: columnsOf(anyText).Draw(t, "serial"),
		}}
		for range rapid.IntRange(0, 3).Draw(t, "series") {
			floats := columnsOf(anyFloat)
			if rapid.Bool().Draw(t, "as a rig writes") {
				floats = columnsOf(rigFloat)
			}
			b.Series = append(b.Series, rules.Series{Process: anyText.Draw(t, "process"),
				Row: columnsOf(rapid.IntRange(0, 1000)).Draw(t, "row"), Value: floats.Draw(t, "value"), Of: floats.Draw(t, "of")})
		}
		return b
	})
	anyLook = rapid.Custom(func(t *rapid.T) rules.Look {
		return rules.Look{Rule: rapid.Int().Draw(t, "rule"), LogFor: anyFloat.Draw(t, "for"), LogAgainst: anyFloat.Draw(t, "against"),
			Withheld: rapid.OneOf(rapid.Just(""), rapid.Just("head.L1 has 3 units of 12"), rapid.String()).Draw(t, "withheld")}
	})
)

// A record comes back as it was written, floats bit for bit, nil as nil, and is the same
// bytes when it is written again.
func TestRecord(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		e := &Entry{
			Event: rules.Event{Index: rapid.Uint64().Draw(t, "index"), Batch: anyBatch.Draw(t, "batch"),
				At: time.Unix(rapid.Int64Range(-1e9, 1e11).Draw(t, "s"), rapid.Int64Range(0, 999_999_999).Draw(t, "ns")).UTC()},
			Outcomes: rules.Outcomes{Looks: columnsOf(anyLook).Draw(t, "looks"), Remarks: []string{rapid.String().Draw(t, "remark")}},
		}
		b, err := encode(e)
		if err != nil {
			t.Fatal(err)
		}
		got, err := decode(b)
		if err != nil {
			t.Fatal(err)
		}
		again, err := encode(got)
		if err != nil || !bytes.Equal(b, again) {
			t.Fatalf("%q, then %q (%v)", b, again, err)
		}
		bits(&e.Event, &e.Outcomes)
		bits(&got.Event, &got.Outcomes)
		if !reflect.DeepEqual(e, got) {
			t.Fatalf("wrote %+v %+v\nread  %+v %+v", e.Event.Batch, e.Outcomes, got.Event.Batch, got.Outcomes)
		}
	})
}

// bits takes NaN, which is never equal to itself, out of what was compared by its bytes.
func bits(e *rules.Event, out *rules.Outcomes) {
	clear := func(values []float64) {
		for i, v := range values {
			if math.IsNaN(v) {
				values[i] = float64(math.Float64bits(v))
			}
		}
	}
	for i := range e.Batch.Series {
		clear(e.Batch.Series[i].Value)
		clear(e.Batch.Series[i].Of)
	}
	for i := range out.Looks {
		pair := []float64{out.Looks[i].LogFor, out.Looks[i].LogAgainst}
		clear(pair)
		out.Looks[i].LogFor, out.Looks[i].LogAgainst = pair[0], pair[1]
	}
}

// A record of another version, one cut anywhere, and one with a byte more are refused.
func TestRecordRefused(t *testing.T) {
	whole, err := encode(&Entry{Event: rules.Event{At: time.Unix(5, 0), Batch: rigFile(5)}, Outcomes: rules.Outcomes{Looks: make([]rules.Look, 3)}})
	if err != nil {
		t.Fatal(err)
	}
	for n := range whole {
		if _, err := decode(whole[:n]); err == nil {
			t.Errorf("the first %d of %d bytes pass for a record", n, len(whole))
		}
	}
	if _, err := decode(append(bytes.Clone(whole), 0)); err == nil {
		t.Error("a byte after the end is not noticed")
	}
	for _, version := range []byte{0, recordVersion - 1, correctedVersion + 1, 255} {
		whole[0] = version
		if _, err := decode(whole); err == nil {
			t.Errorf("the version %d is not noticed", version)
		}
	}
}

func FuzzDecode(f *testing.F) {
	for _, e := range []Entry{
		{Event: rules.Event{At: time.Unix(5, 0), Batch: rigFile(12)}, Outcomes: rules.Outcomes{Looks: []rules.Look{{Rule: 1, LogFor: -0.01, LogAgainst: -4.6}}}},
		{Event: rules.Event{Stopped: &rules.Stopped{Why: "told to stop"}}},
		{Event: rules.Event{Batch: &rules.Batch{Series: []rules.Series{{Value: []float64{math.NaN(), 1.0 / 3}}}}}},
	} {
		b, err := encode(&e)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		e, err := decode(b)
		if err != nil {
			return
		}
		again, err := encode(e)
		if err != nil {
			return // a time that RFC 3339 reads and this encoder can't write
		}
		if _, err := decode(again); err != nil {
			t.Fatalf("%q was read, but not what was written from it: %v", b, err)
		}
	})
}

// rigFile is what a rig drops: units one after the other, tested about every 37 s, with one
// value each, as a rig writes it.
func rigFile(rows int) *rules.Batch {
	b := &rules.Batch{Source: "rig1", File: "r1_20260302_1041.csv", SHA256: fmt.Sprintf("%064x", rows), To: int64(41 * rows),
		Written: time.Unix(1_772_448_060, 123_456_789), Series: []rules.Series{{Process: "head.L1"}}}
	at, s := int64(1_772_448_000), &b.Series[0]
	for i := range rows {
		at += 37 + int64(i*i%5) - 2
		b.Rows.Line = append(b.Rows.Line, i+2)
		b.Rows.Time = append(b.Rows.Time, at*1e9)
		b.Rows.Serial = append(b.Rows.Serial, fmt.Sprintf("TP26-%06d", 4711+i+i*i%3))
		s.Row = append(s.Row, i)
		s.Value = append(s.Value, math.Round(1000*(33.4+0.6*math.Sin(float64(i*i*i))))/1000)
	}
	return b
}

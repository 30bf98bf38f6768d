package rules

import (
	"reflect"
	"testing"
)

func TestDifferencesInWords(t *testing.T) {
	upper := 8.022
	before := Plan{Site: "Tessmoor Pumpworks", Characteristics: []Characteristic{{Name: "bore", Lines: []string{"L1"}}, {Name: "head"}},
		Rules: []Rule{{Name: "a", Raise: 0.975, Clear: 0.5}, {Name: "b", Claim: "mean(bore.L1) > 8"}}}
	now := Plan{Site: "Tessmoor Pumpworks", Characteristics: []Characteristic{{Name: "bore", Lines: []string{"L1", "L2"}, Upper: &upper}},
		Rules: []Rule{{Name: "a", Raise: 0.99, Clear: 0.5}, {Name: "c"}}}
	want := []string{
		`characteristic bore: lines ["L1","L2"], was ["L1"]`, `characteristic bore: upper 8.022, was not given`, "characteristic head is gone",
		"rule a: raise 0.99, was 0.975", "rule c is new", "rule b is gone",
	}
	if got := differences(&before, &now); !reflect.DeepEqual(got, want) {
		t.Errorf("%q\nwant %q", got, want)
	}
	if got := differences(&now, &now); got != nil {
		t.Errorf("nothing has changed: %q", got)
	}
}

package rules

import (
	"bytes"
	"encoding/json"
	"fmt"
	"maps"
	"slices"
)

// differences says in words how a plan differs from the one before it: "rule bore: L3 over L1: raise 0.99, was 0.975".
func differences(before, now *Plan) (words []string) {
	if before.Site != now.Site && before.Site != "" {
		words = append(words, fmt.Sprintf("the site is called %q, and was called %q", now.Site, before.Site))
	}
	words = append(words, named("characteristic", before.Characteristics, now.Characteristics, func(c Characteristic) string { return c.Name })...)
	words = append(words, named("offset of rig", before.Offsets, now.Offsets, func(o Offset) string { return o.Name })...)
	return append(words, named("rule", before.Rules, now.Rules, func(r Rule) string { return r.Name })...)
}

// named compares two lists of things that have names.
func named[T any](what string, before, now []T, name func(T) string) (words []string) {
	for _, n := range now {
		i := slices.IndexFunc(before, func(b T) bool { return name(b) == name(n) })
		if i < 0 {
			words = append(words, fmt.Sprintf("%s %s is new", what, name(n)))
			continue
		}
		for _, change := range changed(before[i], n) {
			words = append(words, fmt.Sprintf("%s %s: %s", what, name(n), change))
		}
	}
	for _, b := range before {
		if !slices.ContainsFunc(now, func(n T) bool { return name(n) == name(b) }) {
			words = append(words, fmt.Sprintf("%s %s is gone", what, name(b)))
		}
	}
	return words
}

// changed compares two things key by key, as they stand in the journal.
func changed(before, now any) (words []string) {
	a, b := keys(before), keys(now)
	all := maps.Clone(a)
	maps.Copy(all, b)
	for _, key := range slices.Sorted(maps.Keys(all)) {
		was, is := a[key], b[key]
		switch {
		case bytes.Equal(was, is):
		case was == nil:
			words = append(words, fmt.Sprintf("%s %s, was not given", key, is))
		case is == nil:
			words = append(words, fmt.Sprintf("%s is not given, was %s", key, was))
		default:
			words = append(words, fmt.Sprintf("%s %s, was %s", key, is, was))
		}
	}
	return words
}

func keys(v any) map[string]json.RawMessage {
	text, err := json.Marshal(v)
	m := map[string]json.RawMessage{}
	if err == nil {
		err = json.Unmarshal(text, &m)
	}
	if err != nil {
		panic("rules: a checked plan can be written as JSON: " + err.Error())
	}
	return m
}

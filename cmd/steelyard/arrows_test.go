package main

import (
	"os/exec"
	"strings"
	"testing"
)

// level is how high a package stands; an import may only point to a lower level, or along one
// of the few arrows between neighbours.
var level = map[string]int{
	"cmd/steelyard": 10, "monitor": 9, "monitor/intake": 8, "monitor/feed": 8, "monitor/daylog": 8, "monitor/exhibit": 8, "monitor/config": 7,
	"store": 6, "store/ledger": 5, "rules": 4, "rules/evidence": 3, "rules/claim": 2, "rules/posterior": 1,
}

// Arrows only point down: cmd → monitor → store → rules.
func TestArrowsPointDown(t *testing.T) {
	out, err := exec.Command("go", "list", "-f", `{{.ImportPath}}{{range .Imports}} {{.}}{{end}}`, "steelyard/...").Output()
	if err != nil {
		t.Skipf("go list is not to be had here: %v", err)
	}
	seen := 0
	for _, line := range strings.Split(strings.TrimSpace(string(out)), "\n") {
		fields := strings.Fields(line)
		from := strings.TrimPrefix(fields[0], "steelyard/")
		above, ok := level[from]
		if !ok {
			t.Errorf("the package %s has no place in the order of levels", from)
		}
		seen++
		for _, imported := range fields[1:] {
			to, ours := strings.CutPrefix(imported, "steelyard/")
			if ours && level[to] >= above {
				t.Errorf("%s imports %s, which does not stand below it", from, to)
			}
			if strings.HasPrefix(from, "rules") && (imported == "time/tzdata" || imported == "os" || imported == "net" || imported == "math/rand") {
				t.Errorf("%s imports %s: the engine is pure", from, imported)
			}
		}
	}
	if seen != len(level) {
		t.Errorf("%d packages were seen, %d have a place", seen, len(level))
	}
}

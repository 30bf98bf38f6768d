package evidence

import (
	"encoding/json"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

// The compiler may fuse a product and a sum into one rounding where the machine can, also across
// statements, and outcomes have to be the same bits everywhere. Compiled for arm64, which fuses, with every
// math.FMA turned into a call, no fused instruction may be left.
func TestNothingIsFused(t *testing.T) {
	if testing.Short() {
		t.Skip("compiles for arm64")
	}
	files, err := filepath.Glob("*.go")
	if err != nil {
		t.Fatal(err)
	}
	folder, overlay, asked := t.TempDir(), map[string]string{}, 0
	put := func(name, text string) {
		path, err := filepath.Abs(name)
		if err != nil {
			t.Fatal(err)
		}
		overlay[path] = filepath.Join(folder, name)
		if err := os.WriteFile(overlay[path], []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	for _, file := range files {
		if strings.HasSuffix(file, "_test.go") {
			continue
		}
		source, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		text := strings.ReplaceAll(string(source), "math.FMA(", "calledFMA(")
		if n := strings.Count(text, "calledFMA("); n > 0 {
			asked += n
			put(file, text+"\nvar _ = math.Pi\n")
		}
	}
	put("called_fma.go", "package evidence\n\nvar calledFMA func(x, y, z float64) float64\n")
	list, err := json.Marshal(map[string]any{"Replace": overlay})
	if err == nil {
		err = os.WriteFile(filepath.Join(folder, "overlay.json"), list, 0o644)
	}
	if err != nil {
		t.Fatal(err)
	}
	build := exec.Command("go", "build", "-overlay", filepath.Join(folder, "overlay.json"), "-gcflags=-S", ".")
	build.Env = append(os.Environ(), "GOARCH=arm64", "CGO_ENABLED=0")
	listing, err := build.CombinedOutput()
	if err != nil {
		t.Fatalf("%v\n%s", err, listing[:min(len(listing), 400)])
	}
	if !strings.Contains(string(listing), "FMULD") || asked == 0 {
		t.Fatal("the listing was not read right: no product is in it, or no math.FMA in the source")
	}
	fused := regexp.MustCompile(`\(\S*?(\w+\.go:\d+)\)\s+FN?M(?:ADD|SUB)D`)
	for _, m := range fused.FindAllStringSubmatch(string(listing), -1) {
		t.Errorf("%s is fused", m[1])
	}
}

// The elementary functions of package math have other last bits on other machines.
func TestElementaryFunctionsAreOurOwn(t *testing.T) {
	files, err := filepath.Glob("*.go")
	if err != nil {
		t.Fatal(err)
	}
	foreign := regexp.MustCompile(`math\.(Exp|Log|Pow|Sin|Cos|Tan|Asin|Acos|Atan|Sinh|Cosh|Tanh|Hypot|Cbrt|Erf|Gamma|Lgamma)[A-Za-z0-9]*\(`)
	for _, file := range files {
		if strings.HasSuffix(file, "_test.go") {
			continue
		}
		source, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		if found := foreign.Find(source); found != nil {
			t.Errorf("%s calls %s...)", file, found)
		}
	}
}

package evidence

import (
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

// The compiler may fuse a product and a sum into one rounding where the machine can, also across
// statements, and outcomes have to be the same bits everywhere. Compiled for arm64, which fuses, no line
// of these files may hold a fused instruction that math.FMA did not ask for.
func TestNothingIsFused(t *testing.T) {
	if testing.Short() {
		t.Skip("compiles for arm64")
	}
	build := exec.Command("go", "build", "-gcflags=-S", ".")
	build.Env = append(os.Environ(), "GOARCH=arm64", "CGO_ENABLED=0")
	listing, err := build.CombinedOutput()
	if err != nil {
		t.Fatalf("%v\n%s", err, listing[:min(len(listing), 400)])
	}
	fused := regexp.MustCompile(`\(\S*?(\w+\.go):(\d+)\)\s+FN?M(?:ADD|SUB)D`)
	asked := 0
	for _, m := range fused.FindAllStringSubmatch(string(listing), -1) {
		source, err := os.ReadFile(m[1])
		if err != nil {
			t.Fatal(err)
		}
		n, _ := strconv.Atoi(m[2])
		line := strings.Split(string(source), "\n")[n-1]
		if strings.Contains(line, "math.FMA") {
			asked++
			continue
		}
		t.Errorf("%s:%d is fused: %s", m[1], n, strings.TrimSpace(line))
	}
	if asked == 0 {
		t.Error("not one math.FMA was found in the listing: it was not read right")
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

package monitor

import (
	"bytes"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// An auditor takes the exhibit of an alarm to another folder, with the public key and nothing else; then whatever is
// changed in it is found.
func TestExhibit(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	for i := range 8 {
		drop(t, cfg.Sources[0].Folder, string(rune('a'+i))+".csv", rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+float64(i%2)))
	}
	d.until("eight files are counted", func(s *Status) bool { return s.Sources[0].Counted == 8 })
	if _, err := d.Acknowledge(1, "M. Ferreira", "as typed", "looked at the <rig>"); err != nil {
		t.Fatal(err)
	}
	page, err := dial(cfg.Site.State).Exhibit(1)
	if err != nil {
		t.Fatal(err)
	}
	x, err := d.Explain(1)
	if err != nil {
		t.Fatal(err)
	}
	folder := t.TempDir()
	key := filepath.Join(folder, "site.pub")
	put := func(name string, text []byte) string {
		path := filepath.Join(folder, name)
		if err := os.WriteFile(path, text, 0o644); err != nil {
			t.Fatal(err)
		}
		return path
	}
	put("site.pub", []byte(d.store.Verifying()+"\n"))
	checked, err := VerifyExhibit(put("a1.html", page), key)
	if err != nil || !checked.Driven || !checked.KeyHandedIn || checked.Rows == 0 {
		t.Fatalf("%+v, %v", checked, err)
	}
	for _, shown := range []string{x.Rule.Claim, x.Crossing.SHA256, "M. Ferreira", "looked at the &lt;rig&gt;", "Taken unit by unit", "release procedures", "<svg", x.Adopted.Digest} {
		if !bytes.Contains(page, []byte(strings.ReplaceAll(shown, ">", "&gt;"))) && !bytes.Contains(page, []byte(shown)) {
			t.Errorf("the page does not show %q", shown)
		}
	}
	if bytes.Contains(page, []byte("ZgotmplZ")) {
		t.Error("the template refused something")
	}
	for name, change := range map[string][2]string{
		"a figure on the page": {"raise 0.99", "raise 0.95"},
		"a name on the page":   {"M. Ferreira", "A. Nobody"},
		"the alarm":            {`"alarm":1`, `"alarm":2`},
		"the key":              {`"verifying":"steelyard/`, `"verifying":"steelyard/0`},
		"something is added":   {"</body>", "<p>It was released.</p></body>"},
	} {
		changed := bytes.Replace(page, []byte(change[0]), []byte(change[1]), 1)
		if bytes.Equal(changed, page) {
			t.Fatalf("%s: nothing was changed", name)
		}
		if _, err := VerifyExhibit(put("changed.html", changed), key); !errors.Is(err, ErrNotVerified) {
			t.Errorf("%s: %v", name, err)
		}
	}
	// Any character of the records.
	from := bytes.Index(page, []byte(`"items":`))
	to := bytes.LastIndex(page, []byte("</script>"))
	for at := from; at < to; at += 1 + (to-from)/150 {
		changed := bytes.Clone(page)
		if changed[at] ^= 1; changed[at] == '"' || changed[at] == '\\' {
			continue
		}
		if _, err := VerifyExhibit(put("changed.html", changed), key); !errors.Is(err, ErrNotVerified) {
			t.Errorf("byte %d changed from %q to %q: %v", at, page[at], changed[at], err)
		}
	}
	other := put("other.pub", []byte(strings.Replace(d.store.Verifying(), "+", "+0", 1)))
	if _, err := VerifyExhibit(filepath.Join(folder, "a1.html"), other); !errors.Is(err, ErrNotVerified) {
		t.Errorf("with another key: %v", err)
	}
	if _, err := d.Exhibit(7); err == nil {
		t.Error("an exhibit of an alarm that never was")
	}
}

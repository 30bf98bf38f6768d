package config

import (
	"cmp"
	"path/filepath"
	"slices"
	"time"

	"steelyard/rules/claim"
)

// mostMarks is the size of the largest file of marks that is read, in bytes.
const mostMarks = 1e6

// marks reads the folder of marks; the sources have been read before.
func (c *checker) marks(raw *rawFile) {
	r := raw.Marks
	if r == nil {
		return
	}
	s := &Source{Name: MarksName, Arrives: "whole", Largest: mostMarks, Form: Form{Delimiter: ',', Decimal: '.', TimeFormat: "iso", Zone: c.cfg.Site.Zone}}
	if r.Folder == "" {
		c.fault("marks.folder", "", `a folder such as "drop/marks"`, "the marks have no folder")
		return
	}
	s.Folder = c.path("marks.folder", r.Folder, ".")
	s.Files = c.pattern("marks.files", cmp.Or(r.Files, "*.jsonl"))
	s.Settle = c.duration("marks.settle", r.Settle, 2*time.Second, 0, time.Hour)
	s.Scan = c.duration("marks.scan", r.Scan, 30*time.Second, 100*time.Millisecond, time.Hour)
	for _, other := range c.cfg.Sources {
		if other.Folder == s.Folder {
			c.fault("marks.folder", "", "a folder of its own", "the source %q watches the same folder", other.Name)
		}
		if other.Name == MarksName {
			c.fault("source."+MarksName, "", "another name", "the name %q is taken by the folder of marks", MarksName)
		}
	}
	if rel, err := filepath.Rel(c.cfg.Site.State, s.Folder); err == nil && filepath.IsLocal(rel) {
		c.fault("marks.folder", "", "a folder outside the state folder", "the folder of marks %s lies in the state folder", s.Folder)
	}
	c.cfg.Marks = s
}

// resent is what becomes of other content under a name that was counted.
func (c *checker) resent(key, text string) string {
	ways := []string{"hold", "add", "replace"}
	if text = cmp.Or(text, "hold"); !slices.Contains(ways, text) {
		c.fault(key, claim.Nearest(text, ways), `"hold", "add" or "replace"`, "read %q", text)
	}
	return text
}

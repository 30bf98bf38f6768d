package monitor

import (
	"bytes"
	"fmt"
	"os"
	"strings"

	"steelyard/monitor/exhibit"
)

// Exhibit makes the page of one alarm that proves itself.
func (d *Desk) Exhibit(alarm int) ([]byte, error) {
	content, err := exhibit.Collect(d.store, alarm, d.cfg.Site.Zone)
	if err != nil {
		return nil, err
	}
	return exhibit.Page(content)
}

func (r *remote) Exhibit(alarm int) (page []byte, err error) {
	return page, r.call("POST", "/exhibit", struct{ Alarm int }{alarm}, &page)
}

// VerifyExhibit checks a page by itself; key names the file with the key to verify with, "" for the page's own.
func VerifyExhibit(path, key string) (*exhibit.Checked, error) {
	page, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	var keys []string
	if key != "" {
		text, err := os.ReadFile(key)
		if err != nil {
			return nil, fmt.Errorf("the key to verify with: %w", err)
		}
		keys = strings.Fields(string(text))
	}
	checked, err := exhibit.Check(page, keys)
	if err != nil {
		return nil, fmt.Errorf("%w: %s: %w", ErrNotVerified, path, err)
	}
	return checked, nil
}

// IsExhibit says whether a file is a page and not a store.
func IsExhibit(path string) bool {
	info, err := os.Stat(path)
	if err != nil || info.IsDir() {
		return false
	}
	file, err := os.Open(path)
	if err != nil {
		return false
	}
	defer file.Close()
	head := make([]byte, 64)
	n, _ := file.Read(head)
	return bytes.HasPrefix(bytes.ToLower(head[:n]), []byte("<!doctype html"))
}

package monitor

import (
	"context"
	"encoding/json"
	"fmt"
	"time"

	"steelyard/monitor/feed"
	"steelyard/rules"
	"steelyard/store"
)

// Kinds of what is announced: what every feed has to know and no alarm says.
const (
	countingStopped = "steelyard.counting.stopped.v1"
	diskLow         = "steelyard.disk.low.v1"
)

// announced is a message that does not come from the journal, in the CloudEvents JSON format.
type announced struct {
	SpecVersion     string    `json:"specversion"`
	ID              string    `json:"id"`
	Source          string    `json:"source"`
	Type            string    `json:"type"`
	Time            time.Time `json:"time"`
	DataContentType string    `json:"datacontenttype"`
	Data            struct {
		Site     string `json:"site"`
		Headline string `json:"headline"`
		Text     string `json:"text"`
		Caution  string `json:"caution"`
	} `json:"data"`
}

// announce tells every feed at once, past the outbox: it must not need the store.
func (d *Desk) announce(kind, headline, text string) {
	now := d.now()
	m := announced{SpecVersion: "1.0", ID: fmt.Sprintf("%s.%d", kind, now.UnixNano()), Source: "urn:uuid:" + d.store.Origin(), Type: kind,
		Time: now.In(d.cfg.Site.Zone), DataContentType: "application/json"}
	m.Data.Site, m.Data.Headline, m.Data.Text, m.Data.Caution = d.cfg.Site.Name, headline, text, rules.ReleaseNote
	body, err := json.Marshal(m)
	if err != nil {
		d.log.Error().Err(err).Msg("announce")
		return
	}
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	for _, c := range d.cfg.Feeds {
		f, err := feed.Open(c)
		if err == nil {
			err = f.Deliver(ctx, [][]byte{body})
		}
		if err != nil {
			d.log.Error().Err(err).Str("feed", c.Name).Msg("the feed could not be told: " + headline)
		}
	}
}

// DiskStatus is how much room there is for the state.
type DiskStatus struct {
	Free    int64 `json:"free"`    // bytes; -1 where it can't be told
	Warning int64 `json:"warning"` // below it there is a warning
	Low     bool  `json:"low"`
}

// watchDisk looks how much room there is, and says so once when it becomes little.
func (d *Desk) watchDisk() {
	now := DiskStatus{Free: store.Free(d.cfg.Site.State), Warning: d.cfg.Site.DiskWarning}
	now.Low = now.Free >= 0 && now.Free < now.Warning
	d.mu.Lock()
	was := d.disk
	d.disk = now
	d.mu.Unlock()
	if now.Low && !was.Low {
		text := fmt.Sprintf("There are %.2f GB left on the disk of the state folder %s, and %.2f GB are the least that the configuration wants. "+
			"When it is full the program stops counting.", float64(now.Free)/1e9, d.cfg.Site.State, float64(now.Warning)/1e9)
		d.log.Error().Int64("free", now.Free).Msg("the disk is nearly full; when it is, the program stops counting")
		d.announce(diskLow, "the disk is nearly full", text)
	}
}

// broke says that the store failed; the writer ends with it.
func (d *Desk) broke(err error) {
	select {
	case d.broken <- err:
	default:
	}
}

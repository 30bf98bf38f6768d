package monitor

import (
	"time"

	"steelyard/rules"
)

// Status is where everything stands.
type Status struct {
	Type      string               `json:"type"` // "status"
	Site      string               `json:"site"`
	Now       time.Time            `json:"now"`
	Watching  bool                 `json:"watching"`            // a daemon runs
	LastAlive time.Time            `json:"last_alive,omitzero"` // when one was last known to, where none does
	Program   string               `json:"program"`
	Records   uint64               `json:"records"` // in the journal
	Sources   []SourceStatus       `json:"sources"`
	Alarms    []rules.RuleStanding `json:"alarms"`
	Rules     []rules.RuleStanding `json:"rules"`
	Processes []rules.Standing     `json:"processes"`
	Feeds     []FeedStatus         `json:"feeds"`
	Waiting   HeldStatus           `json:"held"`
	Stepped   *rules.Stepped       `json:"stepped,omitempty"` // the last step of the clock on the wall since the start
	Disk      DiskStatus           `json:"disk"`
	Caution   string               `json:"caution"`
}

// SourceStatus is where one source stands, since the daemon started.
type SourceStatus struct {
	Name     string    `json:"name"`
	Folder   string    `json:"folder"`
	Able     bool      `json:"able"`          // it can be looked at
	Why      string    `json:"why,omitempty"` // it can't
	Counted  int       `json:"counted"`       // files, since the start
	Held     int       `json:"held"`          // files held whole, or with held rows
	Again    int       `json:"again"`
	LastFile string    `json:"last_file,omitempty"`
	LastAt   time.Time `json:"last_at,omitzero"`
	Remark   string    `json:"remark,omitempty"` // the last thing passed over, and why
}

// HeldStatus is how much that is held waits for a person's decision, since the store began.
type HeldStatus struct {
	Files int `json:"files"` // held whole
	Rows  int `json:"rows"`  // of files that were counted
}

// FeedStatus is where one feed stands.
type FeedStatus struct {
	Name    string `json:"name"`
	Waiting int    `json:"waiting"`           // messages not yet delivered
	Trouble string `json:"trouble,omitempty"` // why the last delivery failed
}

// Status says where everything stands. Watching is for the caller to say.
func (d *Desk) Status() (*Status, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	plan := d.state.Plan()
	st := &Status{
		Type: "status", Site: plan.Site, Now: d.now(), Program: Program(), Records: d.store.Next(),
		Alarms: d.state.Alarms(), Rules: d.state.RuleStandings(), Processes: d.state.Standings(),
		Stepped: d.clock, Disk: d.disk, Caution: rules.ReleaseNote,
	}
	st.LastAlive, _ = d.store.LastAlive()
	for _, src := range d.cfg.Sources {
		st.Sources = append(st.Sources, *d.sources[src.Name])
	}
	for _, src := range watchMarks(d.cfg) {
		st.Sources = append(st.Sources, *d.sources[src.Name])
	}
	held, err := d.store.Waiting()
	if err != nil {
		return nil, err
	}
	for _, w := range held {
		if st.Waiting.Rows += w.Rows; w.Rows == 0 {
			st.Waiting.Files++
		}
	}
	for _, f := range d.cfg.Feeds {
		waiting, err := d.waiting(f.Name)
		if err != nil {
			return nil, err
		}
		st.Feeds = append(st.Feeds, FeedStatus{Name: f.Name, Waiting: waiting, Trouble: d.trouble[f.Name]})
	}
	return st, nil
}

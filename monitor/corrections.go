package monitor

import "net/http"

// handleCorrections answers the verbs by which people correct what was counted.
func (d *Desk) handleCorrections(mux *http.ServeMux) {
	mux.HandleFunc("POST /withdraw", func(w http.ResponseWriter, r *http.Request) {
		var q Withdrawal
		if ask(w, r, &q) {
			a, err := d.Withdraw(q)
			reply(w, a, err)
		}
	})
	mux.HandleFunc("POST /mark", func(w http.ResponseWriter, r *http.Request) {
		var q Mark
		if ask(w, r, &q) {
			a, err := d.Mark(q)
			reply(w, a, err)
		}
	})
	mux.HandleFunc("GET /held", func(w http.ResponseWriter, _ *http.Request) {
		items, err := d.Held()
		reply(w, items, err)
	})
	mux.HandleFunc("POST /held", func(w http.ResponseWriter, r *http.Request) {
		var q HeldRef
		if ask(w, r, &q) {
			items, err := d.ShowHeld(q)
			reply(w, items, err)
		}
	})
	mux.HandleFunc("POST /decide", func(w http.ResponseWriter, r *http.Request) {
		var q Decision
		if ask(w, r, &q) {
			a, err := d.Decide(q)
			reply(w, a, err)
		}
	})
}

func (r *remote) Withdraw(w Withdrawal) (*Withdrawn, error) {
	a := &Withdrawn{}
	return a, r.call("POST", "/withdraw", w, a)
}

func (r *remote) Mark(m Mark) (*Marked, error) {
	a := &Marked{}
	return a, r.call("POST", "/mark", m, a)
}

func (r *remote) Held() (items []HeldItem, err error) {
	return items, r.call("GET", "/held", nil, &items)
}

func (r *remote) ShowHeld(ref HeldRef) (items []HeldItem, err error) {
	return items, r.call("POST", "/held", ref, &items)
}

func (r *remote) Decide(q Decision) (*HeldDecided, error) {
	a := &HeldDecided{}
	return a, r.call("POST", "/decide", q, a)
}

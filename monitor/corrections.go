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
}

func (r *remote) Withdraw(w Withdrawal) (*Withdrawn, error) {
	a := &Withdrawn{}
	return a, r.call("POST", "/withdraw", w, a)
}

func (r *remote) Mark(m Mark) (*Marked, error) {
	a := &Marked{}
	return a, r.call("POST", "/mark", m, a)
}

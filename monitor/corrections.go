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
}

func (r *remote) Withdraw(w Withdrawal) (*Withdrawn, error) {
	a := &Withdrawn{}
	return a, r.call("POST", "/withdraw", w, a)
}

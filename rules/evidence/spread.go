package evidence

func sdOdds(ss, nu, x float64) Odds                  { return unweighed }
func sdRatioOdds(ss1, nu1, ss2, nu2, r float64) Odds { return unweighed }
func outsideOdds(p *Process, fraction float64) Odds  { return unweighed }
func capabilityOdds(p *Process, c float64) Odds      { return unweighed }

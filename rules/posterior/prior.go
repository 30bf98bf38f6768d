package posterior

import (
	"errors"
	"fmt"
	"math"
)

// Check says in a sentence what is wrong with the prior for a family; nil where nothing is.
func (p Prior) Check(f Family) error {
	if err := f.Accepts(1, 1); err != nil {
		return err
	}
	if p.Reference {
		return nil
	}
	switch f {
	case NormalFamily, LognormalFamily:
		return p.checkNormal(f)
	case BinomialFamily:
		if !(p.A >= 0 && p.B >= 0) || math.IsInf(p.A, 0) || math.IsInf(p.B, 0) {
			return fmt.Errorf("prior a %v and b %v: finite numbers from 0 on are expected", p.A, p.B)
		}
	case PoissonFamily:
		if !(p.Shape >= 0 && p.Rate >= 0) || math.IsInf(p.Shape, 0) || math.IsInf(p.Rate, 0) {
			return fmt.Errorf("prior shape %v and rate %v: finite numbers from 0 on are expected", p.Shape, p.Rate)
		}
	}
	return nil
}

func (p Prior) checkNormal(f Family) error {
	switch {
	case math.IsNaN(p.Mean) || math.IsInf(p.Mean, 0):
		return fmt.Errorf("prior mean %v: a finite number is expected", p.Mean)
	case f == LognormalFamily && p.Mean <= 0:
		return fmt.Errorf("prior mean %v: of a lognormal characteristic it is the median, above 0", p.Mean)
	case !(p.MeanWorth > 0) || math.IsInf(p.MeanWorth, 0):
		return fmt.Errorf("prior mean_worth %v: a number of units above 0 is expected", p.MeanWorth)
	case !(p.SD >= 0) || math.IsInf(p.SD, 0):
		return fmt.Errorf("prior sd %v: a finite number from 0 on is expected", p.SD)
	case !(p.SDWorth > 0) || math.IsInf(p.SDWorth, 0):
		return fmt.Errorf("prior sd_worth %v: a number of units above 0 is expected", p.SDWorth)
	}
	return nil
}

// Posterior is what is believed after the data (Gelman et al., Bayesian Data Analysis,
// sections 2.4, 2.6 and 3.3, in the parameters k0, nu0, m0, s0^2 used there). For normal:
//
//	K = k0 + n, Nu = nu0 + n, M = (k0 m0 + n avg)/K,
//	SS = nu0 s0^2 + S + (k0 n/K)(avg - m0)^2
//
// with k0 = MeanWorth, nu0 = SDWorth, m0 = Mean, s0 = SD, and for the reference prior k0 = 0,
// nu0 = -1, s0 = 0. For lognormal the prior's mean is the median in the unit of the data and
// its sd the standard deviation of natural logarithms. The prior must have passed its Check.
// TestNormalUpdate, TestCounts, TestShiftAndScale, TestLognormalIsNormalOnLogs.
func (p Prior) Posterior(f Family, s Sums) Posterior {
	switch f {
	case BinomialFamily:
		a, b := p.A, p.B
		if p.Reference {
			a, b = 0.5, 0.5
		}
		return Posterior{Family: f, A: a + s.Total, B: b + (s.Exposure - s.Total)}
	case PoissonFamily:
		shape, rate := p.Shape, p.Rate
		if p.Reference {
			shape, rate = 0.5, 0
		}
		return Posterior{Family: f, A: shape + s.Total, B: rate + s.Exposure}
	}
	if p.Reference {
		return Posterior{Family: f, M: s.Mean, MLow: s.MeanLow, K: s.N, Nu: s.N - 1, SS: s.SS}
	}
	m0 := pair{hi: p.Mean}
	if f == LognormalFamily {
		m0 = logPair(p.Mean)
	}
	k := twoSum(p.MeanWorth, s.N)
	d := pair{s.Mean, s.MeanLow}.add(m0.neg())
	m := m0.add(d.mul(pair{hi: s.N}).over(k))
	ss := twoProduct(p.SD, p.SD).mul(pair{hi: p.SDWorth}).add(pair{s.SS, s.SSLow}).
		add(d.mul(d).mul(twoProduct(p.MeanWorth, s.N)).over(k))
	return Posterior{Family: f, M: m.hi, MLow: m.lo, K: k.hi, Nu: p.SDWorth + s.N, SS: ss.hi}
}

// ErrImproper is wrapped by what Proper returns.
var ErrImproper = errors.New("too little is known yet")

// Proper is nil where the posterior is a distribution that can be weighed; else a sentence that
// wraps ErrImproper. Under the reference prior it takes more than one unit of a normal process (under
// a discount, more than one effective unit), and some exposure of a poisson one. TestProper.
func (p Posterior) Proper() error {
	switch p.Family {
	case NormalFamily, LognormalFamily:
		if !(p.Nu > 0) || !(p.K > 0) {
			return fmt.Errorf("%w: %v units, and more than one is needed under the reference prior", ErrImproper, p.K)
		}
	case BinomialFamily:
		if !(p.A > 0) || !(p.B > 0) {
			return fmt.Errorf("%w: Beta(%v, %v)", ErrImproper, p.A, p.B)
		}
	case PoissonFamily:
		if !(p.A > 0) || !(p.B > 0) {
			return fmt.Errorf("%w: Gamma(%v, rate %v)", ErrImproper, p.A, p.B)
		}
	}
	return nil
}

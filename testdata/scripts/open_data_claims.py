# Reference values for monitor/opendata_test.go, by routes that are not the engine's:
# warpbreaks: a ratio of gamma variables is a Beta tail; morley, the largest of five means: the integral of a
# density times distribution functions; morley, a contrast of five means: the inversion of the product of
# characteristic functions (Gil-Pelaez 1951; of Student's law: Hurst 1995). Needs mpmath. Run in testdata.
import csv
from mpmath import mp, mpf, quad, gamma, besselk, sqrt, betainc, exp, pi, inf, linspace

mp.dps = 30
breaks = {}
for row in csv.DictReader(open("data/warpbreaks.csv")):
    breaks.setdefault(row["wool"], []).append(int(row["breaks"]))
a, b = (mpf(sum(breaks[w])) + mpf(1) / 2 for w in "AB")
ra, rb = (mpf(len(breaks[w])) for w in "AB")


def rate_ratio(r):
    # A/ra > r B/rb where X = A/(A+B) ~ Beta(a, b) is above r ra/(r ra + rb)
    x = r * ra / (r * ra + rb)
    return betainc(b, a, 0, 1 - x, regularized=True)


print("rate A/B > 1:", rate_ratio(mpf(1)), " > 1.25:", rate_ratio(mpf(5) / 4))

speed = {}
for row in csv.DictReader(open("data/morley.csv")):
    speed.setdefault(row["experiment"], []).append(mpf(row["speed"]))
law = []
for k in sorted(speed):
    v = speed[k]
    n = len(v)
    m = sum(v) / n
    s = sqrt(sum((x - m) ** 2 for x in v) / (n - 1))
    law.append((m, s / sqrt(n), mpf(n - 1)))


def density(t, nu):
    return gamma((nu + 1) / 2) / gamma(nu / 2) / sqrt(nu * pi) * (1 + t * t / nu) ** (-(nu + 1) / 2)


def below(t, nu):
    tail = betainc(nu / 2, mpf(1) / 2, 0, nu / (nu + t * t), regularized=True) / 2
    return 1 - tail if t > 0 else tail


def integrand(x):
    p = density((x - law[0][0]) / law[0][1], law[0][2]) / law[0][1]
    for m, s, nu in law[1:]:
        p *= below((x - m) / s, nu)
    return p


print("1 is the largest:", quad(integrand, linspace(700, 1150, 31)) + quad(integrand, [1150, 1400, 2000, 5000, inf]))


def phi(t, nu):
    z = sqrt(nu) * t
    return besselk(nu / 2, z) * z ** (nu / 2) / gamma(nu / 2) / mpf(2) ** (nu / 2 - 1)


weights = [mpf(1)] + [mpf(-1) / 4] * 4
centre = sum(w * l[0] for w, l in zip(weights, law))
d = mpf(40) - centre


def inverse(t):
    p = mpf(1)
    for w, (m, s, nu) in zip(weights, law):
        p *= phi(abs(w) * s * t, nu)
    return p * mp.sin(t * d) / t


print("1 over the average of the others by 40:", mpf(1) / 2 - quad(inverse, linspace(mpf(10) ** -20, 1, 41)) / pi)

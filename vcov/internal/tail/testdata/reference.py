#!/usr/bin/env python3
"""Writes t.txt, f.txt and quantile.txt beside this file.

Every value is computed in decimal arithmetic of 520 digits from the power series
of the incomplete beta function (Abramowitz & Stegun 26.5.4)

    I_x(a, b) = x^a y^b / (a B(a, b)) sum_k (a+b)_k / (a+1)_k x^k

whose terms are all positive: of the upper tail itself where x < 0.6, else of the
lower tail, whose complement then still has over 100 correct digits. Log gamma is
Stirling's series at z + shift >= 900 with 200 terms. Arguments are float64 values
taken exactly. Nothing is shared with the package under test but the definition.
Python's standard library only; about two minutes.
"""
from decimal import Decimal as D, getcontext
from fractions import Fraction
from functools import lru_cache
from math import comb
import os

getcontext().prec = 520
getcontext().Emin, getcontext().Emax = -10**15, 10**15
EPS = D(10) ** -525

def bernoulli(n):
    b = [Fraction(0)] * (n + 1)
    b[0] = Fraction(1)
    for m in range(1, n + 1):
        if m > 1 and m % 2:
            continue
        b[m] = -sum(comb(m + 1, j) * b[j] for j in range(m) if b[j]) / (m + 1)
    return b

BERN = bernoulli(400)

def arctan_inverse(n):
    s, term, k = D(0), D(1) / n, 0
    while term > EPS:
        s += (-1) ** k * term / (2 * k + 1)
        term /= n * n
        k += 1
    return s

PI = 4 * (4 * arctan_inverse(5) - arctan_inverse(239))  # Machin
LN10 = D(10).ln()

@lru_cache(None)
def lgamma(z):
    product = D(1)
    while z < 900:
        product *= z
        z += 1
    s, power = D(0), z
    for k in range(1, 201):
        b = BERN[2 * k]
        term = D(b.numerator) / D(b.denominator) / (2 * k * (2 * k - 1)) / power
        s += term
        power *= z * z
        if abs(term) < EPS:
            break
    else:
        raise ArithmeticError("Stirling's series did not settle")
    return (z - D("0.5")) * z.ln() - z + (2 * PI).ln() / 2 + s - product.ln()

def series(x, y, a, b):
    s, term, k = D(0), D(1), 0
    while term > s * EPS:
        s += term
        term *= (a + b + k) / (a + 1 + k) * x
        k += 1
    log_b = lgamma(a) + lgamma(b) - lgamma(a + b)
    return (a * x.ln() + b * y.ln() - log_b).exp() / a * s

def upper(f, d1, d2):
    den = d2 + d1 * f
    x, y = d2 / den, d1 * f / den
    if x < D("0.6"):
        return series(x, y, d2 / 2, d1 / 2)
    return 1 - series(y, x, d1 / 2, d2 / 2)

def t_tail(t, df):
    return upper(t * t, D(1), df)

def quantile(alpha, df):
    """Newton in log t with the density by its closed form."""
    def log_density(t):
        return lgamma((df + 1) / 2) - lgamma(df / 2) - (PI * df).ln() / 2 - (df + 1) / 2 * (1 + t * t / df).ln()
    u = D(0)
    # bisect to begin with
    low, high = D(-8), 4 + 2 * -alpha.ln() / min(df, 40)
    for _ in range(12):
        u = (low + high) / 2
        if t_tail(u.exp(), df) > alpha:
            low = u
        else:
            high = u
    u = high
    for _ in range(60):
        t = u.exp()
        p = t_tail(t, df)
        step = (p.ln() - alpha.ln()) * p / (2 * t * log_density(t).exp())
        u += step
        if abs(step) < D(10) ** -16:  # squared at the next step, which is not needed
            return u.exp()
    raise ArithmeticError("no quantile")

def text(v):
    return "%.25e" % v if v == 0 else str(+v.normalize().quantize(D(10) ** (v.adjusted() - 24)).normalize())

def log10(p, one_minus=None):
    return p.ln() / LN10

T_DF = [1, 2, 3, 5, 10, 30, 100, 1e3, 1e5, 1e5 + 1, 1e6, 1e8, 1e10, 1e11, 2.5, 0.5, 7.25, 1234.5]
T = [1e-8, 0.1, 0.5, 1, 1.96, 3, 6, 10, 40]
F_DF = [1, 2, 5, 20, 100]
F_BIG = [1e3, 1e5, 1e8, 1e11]
F = [1e-8, 0.1, 0.5, 0.999, 1, 2, 4, 10, 50, 1000]
ALPHA = [0.999, 0.9, 0.5, 0.32, 0.31, 0.1, 0.05, 0.01, 0.001, 1e-6, 1e-9, 1e-12, 1e-20, 1e-100]

def write(name, head, rows):
    here = os.path.dirname(os.path.abspath(__file__))
    with open(os.path.join(here, name), "w") as out:
        out.write("# " + head + "; written by reference.py\n")
        for row in rows:
            out.write(" ".join(row) + "\n")

def main():
    rows = []
    for df in T_DF:
        for t in T:
            p = t_tail(D(t), D(df))
            rows.append([repr(float(df)), repr(float(t)), text(p), text(log10(p))])
    write("t.txt", "df t p log10(p)", rows)
    rows = []
    for d1 in F_DF:
        for d2 in F_DF + F_BIG:
            for f in F:
                if d1 * f > 2200 and d2 > 1e3:
                    continue  # the complement would lose all 520 digits
                p = upper(D(f), D(d1), D(d2))
                rows.append([repr(float(d1)), repr(float(d2)), repr(float(f)), text(p), text(log10(p))])
    write("f.txt", "df1 df2 f p log10(p)", rows)
    rows = []
    for df in T_DF:
        for alpha in ALPHA:
            rows.append([repr(float(df)), repr(alpha), text(quantile(D(alpha), D(df)))])
    write("quantile.txt", "df alpha t with P(|T| >= t) = alpha", rows)

if __name__ == "__main__":
    main()

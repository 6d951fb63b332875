#!/usr/bin/python3
# SPDX-License-Identifier: GPL-3.0-or-later
"""Makes tests/data/fresnel_reference.csv: Fresnel integrals of exact doubles in 200-digit decimal arithmetic.

    /usr/bin/python3 tests/data/make_fresnel_reference.py > tests/data/fresnel_reference.csv

Up to |w| = 12 the power series DLMF 7.6.4 and 7.6.6, beyond it the asymptotic series DLMF 7.12.2 and 7.12.3 (the
smallest term is below 1e-90 there) with the phase reduced as an exact fraction.  Nothing of limbwatch is used.
Below |w| = 12 the values are compared with scipy.special.fresnel first; further out that rounds the phase (1e-12 at 1e4).
"""
import random
import sys
from decimal import Decimal, getcontext
from fractions import Fraction

getcontext().prec = 200
SEED = 20260


def arctan_inverse(n):
    total = term = Decimal(1) / n
    k = 1
    while abs(term) > Decimal(10) ** -198:
        term /= -n * n
        k += 2
        total += term / k
    return total


PI = 4 * (4 * arctan_inverse(5) - arctan_inverse(239))    # Machin


def exact(fraction):
    return Decimal(fraction.numerator) / Decimal(fraction.denominator)


def series(w):
    """C and S by DLMF 7.6.4, 7.6.6."""
    x = exact(Fraction(w))
    phi = PI * x * x / 2
    c, s, term, n = x, Decimal(0), x, 0
    while True:
        n += 1
        term = term * phi / n
        add = term / (2 * n + 1) * (-1 if n & 2 else 1)
        if n & 1:
            s += add
        else:
            c += add
        if n > 4 and abs(add) <= Decimal(10) ** -180 * abs(x):
            return c, s


def sine_cosine(angle):
    s = c = Decimal(0)
    term, n = Decimal(1), 0
    while n < 4 or abs(term) > Decimal(10) ** -190:
        if n & 1:
            s += term * (-1 if n & 2 else 1)
        else:
            c += term * (-1 if n & 2 else 1)
        n += 1
        term = term * angle / n
    return s, c


def asymptotic(w):
    """C and S by DLMF 7.5.3, 7.5.4, 7.12.2 and 7.12.3."""
    a = abs(Fraction(w))
    s, c = sine_cosine(PI * exact(a * a % 4) / 2)
    x = exact(a)
    y = (PI * x * x) ** 2
    f = g = Decimal(0)
    term = 1 / (PI * x)
    k = 1
    while True:                     # term: (-1)^m (4m-1)!! / (pi w^2)^(2m) / (pi w)
        f += term
        g += term * k / (PI * x * x)
        following = -term * k * (k + 2) / y
        if abs(following) >= abs(term) or abs(following) < Decimal(10) ** -190 * f:
            break
        term = following
        k += 4
    sign = 1 if w > 0 else -1
    half = Decimal(1) / 2
    return sign * (half + f * s - g * c), sign * (half - f * c - g * s)


def fresnel(w):
    return series(w) if abs(w) <= 12 else asymptotic(w)


def arguments():
    source = random.Random(SEED)
    fixed = [0.0, 5e-324, 2.2250738585072014e-308, 1e-300, 1e-160, 1e-100, 1e-20, 1e-8, 1e-4, 0.01, 0.1, 0.5,
             0.9999999999999999, 1.0, 1.0000000000000002, 1.21720, 1.87252, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0, 12.0,
             31.0, 100.0, 1e3, 36974.0, 1e5, 123456789.0, 2.0 ** 26 + 1, 1e8 / 3, 2.0 ** 53 - 1, 1e13 / 7, 1e15 / 3,
             3.1e16, 3.3e16, 1e17, 1e100, 1e155, 1e300, 1.7976931348623157e308]
    drawn = [source.uniform(0, 12) for _ in range(120)] + [10 ** source.uniform(1.08, 17) for _ in range(80)] \
        + [10 ** source.uniform(-12, 0) for _ in range(20)]
    for w in sorted(fixed + drawn):
        yield w
        yield -w


def main():
    rows = []
    for w in arguments():
        c, s = fresnel(w)
        half = Decimal(1) / 2
        rows.append((w, c, s, ((half + c) ** 2 + (half + s) ** 2) / 2))
    try:
        from scipy.special import fresnel as theirs
        worst = max(max(abs(float(c) - theirs(w)[1]), abs(float(s) - theirs(w)[0])) for w, c, s, _ in rows if abs(w) < 12)
        print("largest difference from scipy.special.fresnel below 12: %.1e" % worst, file=sys.stderr)
        assert worst < 1e-14
    except ImportError:
        print("no scipy here: not compared", file=sys.stderr)
    print("# C(w), S(w), edge intensity; made by make_fresnel_reference.py: decimal arithmetic, DLMF 7.6 and 7.12; seed %d" % SEED)
    print("# w (exact, hexadecimal),C,S,intensity")
    for w, c, s, intensity in rows:
        print("%s,%.24e,%.24e,%.24e" % (float.hex(w), c, s, intensity))


main()

"""Derive the constants of src/elementary.h (needs mpmath): python csrc/constants.py

Chebyshev fits, which lie within a factor of two of the least maximum error,
rounded to the type; the error printed is that of the rounded polynomial in
exact arithmetic, measured on a fine grid, relative to the function.
"""

from mpmath import atanh, chebyfit, ln, mp, mpf, nstr, polyval, sqrt

mp.dps = 60


def to_binary(x, bits):
    """x rounded to a binary significand of that many bits."""
    with mp.workprec(bits):
        return +x


def exp2_terms(x):
    """(2^x - 1) / x; its series near 0, where the quotient loses all digits."""
    return (mpf(2) ** x - 1) / x if abs(x) > mpf(10) ** -25 else ln(2) + x * ln(2) ** 2 / 2


def atanh_terms(w):
    """2 (atanh(z) / z - 1) / w at w = z^2."""
    return 2 * (atanh(sqrt(w)) / sqrt(w) - 1) / w if w > mpf(10) ** -25 else mpf(2) / 3


def report(title, terms, interval, count, bits, whole, digits):
    """Print the rounded coefficients, lowest order first, and the error they leave.

    whole(x, p) is the (approximated, true) pair of the full function, given p
    for the polynomial at x.
    """
    fit = [to_binary(c, bits) for c in chebyfit(terms, interval, count)]
    low, high = interval
    worst = mpf(0)
    for i in range(2001):
        x = low + (high - low) * i / 2000
        got, true = whole(x, polyval(fit, x))
        worst = max(worst, abs(got / true - 1))
    print(f"{title}: relative error {nstr(worst * mpf(2) ** bits, 3)} x 2^-{bits}")
    for c in reversed(fit):
        print(f"    {nstr(c, digits)}")


for bits, digits, exp_count, log_count, ln2_bits in ((24, 10, 6, 3, 12), (53, 18, 11, 7, 40)):
    print(f"---- {bits}-bit significand")
    half = mpf(1) / 2
    report(
        "2^x = 1 + x (c0 + c1 x + ...), |x| <= 1/2",
        exp2_terms, [-half, half], exp_count, bits, lambda x, p: (1 + x * p, mpf(2) ** x), digits,
    )  # fmt: skip
    limit = ((sqrt(2) - 1) / (sqrt(2) + 1)) ** 2
    report(
        "2 atanh(z) = 2 z + z w (c0 + c1 w + ...), w = z^2",
        atanh_terms, [mpf(0), limit], log_count, bits,
        lambda w, p: (2 + w * p, 2 * atanh(sqrt(w)) / sqrt(w) if w else mpf(2)), digits,
    )  # fmt: skip
    high = to_binary(ln(2), ln2_bits)
    print(f"log2(e) = {nstr(to_binary(1 / ln(2), bits), digits)}")
    print(f"ln 2    = {nstr(high, digits)} + {nstr(to_binary(ln(2) - high, bits), digits)}")

/* Template (see real.h).  exp and log of the core's own: IEEE-754 basic
 * operations only, no table, no branch, so that a loop over lanes vectorises
 * and every machine gives the same bits.  Constants and the errors they leave
 * come from ../constants.py; what all roundings come to is measured as a whole,
 * on the LLRs, by the accuracy tests. */

union F(bits) { real r; word w; };

static inline real F(from_word)(word w)
{
    const union F(bits) b = {.w = w};
    return b.r;
}

static inline word F(to_word)(real r)
{
    const union F(bits) b = {.r = r};
    return b.w;
}

static inline real F(magnitude)(real x)
{
    return F(from_word)(F(to_word)(x) & ~((word)1 << (REAL_BITS - 1)));
}

static inline real F(least)(real a, real b) { return a < b ? a : b; }

static inline real F(most)(real a, real b) { return a > b ? a : b; }

/* 2^-n for a whole number n >= -ZERO_WEIGHT, and 0 where it would be subnormal. */
static inline real F(half_to_the)(real n)
{
    const real held = F(least)(n, (real)ZERO_WEIGHT);
    const word scale = MAGIC_WORD + EXPONENT_ONE - F(to_word)(held + MAGIC);
    return held < (real)ZERO_WEIGHT ? F(from_word)(scale << FRACTION_BITS) : 0;
}

/* 2^-(x + low) = power 2^-n, low being what roundings took off x, which is small
 * against x but not against 1: n is the whole number nearest to their sum (the
 * sum itself where it has no fraction digits any more), power in
 * [0.7, 1.42], relative error below 1.3 u, a polynomial.  x < 0 comes from
 * rounding which of two levels is the nearest; it is held where half_to_the()
 * can take it, beyond what happens at 80 dB. */
static inline real F(split_exp2)(real x, real low, real *n)
{
#if REAL_BITS == 32
    const real c0 = 0.6931471825f, c1 = 0.2402265072f, c2 = 0.05550356954f, c3 = 0.009618083015f,
               c4 = 0.001339086331f, c5 = 0.0001545316336f;
#else
    const real c0 = 0.693147180559945286, c1 = 0.240226506959100972, c2 = 0.055504108664821597,
               c3 = 0.00961812910760688825, c4 = 0.00133335581464169356,
               c5 = 0.000154035304417360499, c6 = 0.0000152527338298361192,
               c7 = 1.32154425879216893e-6, c8 = 1.01780624458457737e-7,
               c9 = 7.07258594926922339e-9, c10 = 4.45496059818651856e-10;
#endif
    const real whole = (real)((word)1 << (FRACTION_BITS - 1));
    const real sum = x + low, rest = low - (sum - x);
    const real held = sum < whole ? F(most)(sum, -(real)ZERO_WEIGHT / 2) : 0;
    const real nearest = (held + MAGIC) - MAGIC;
    const real f = (nearest - held) - (sum < whole ? rest : 0);
#if REAL_BITS == 32
    const real p = c0 + f * (c1 + f * (c2 + f * (c3 + f * (c4 + f * c5))));
#else
    const real high = c6 + f * (c7 + f * (c8 + f * (c9 + f * c10)));
    const real p = c0 + f * (c1 + f * (c2 + f * (c3 + f * (c4 + f * (c5 + f * high)))));
#endif
    *n = sum < whole ? nearest : sum;
    return 1 + f * p;
}

/* exp(-t), t >= 0: the product rounds, which costs t u more. */
static inline real F(exp_minus)(real t)
{
    real n;
    const real power = F(split_exp2)(t * (real)LOG2_E, 0, &n);
    return power * F(half_to_the)(n);
}

/* ln(a / b) for normal a, b > 0, given their difference d = a - b: absolute
 * error below 2 u (1 + |result|) beyond what a, b and d bring along.  The
 * exponents are taken off first, so that a / b may be beyond the type's range;
 * ln of what remains is 2 atanh((a - b) / (a + b)), where near a = b only the
 * rounding of d counts: a quotient less 1 would lose all digits there, and sums
 * a and b may be known less well than the sum d of their terms' differences. */
static inline real F(log_ratio)(real a, real b, real d)
{
#if REAL_BITS == 32
    const real ln2_high = 0.6931152344f, ln2_low = 3.19461833e-5f, c0 = 0.6666668653f,
               c1 = 0.3998878002f, c2 = 0.2957994938f;
#else
    const real ln2_high = 0.693147180560117704, ln2_low = -1.72394445256148348e-13,
               c0 = 0.666666666666666963, c1 = 0.399999999998995048, c2 = 0.285714286259754868,
               c3 = 0.222222111347950807, c4 = 0.181828891252617225, c5 = 0.153317216005560419,
               c6 = 0.146164496850434061;
#endif
    const real sqrt2 = R(1.41421356237309505);
    const word fraction = ((word)1 << FRACTION_BITS) - 1, one = (word)EXPONENT_ONE << FRACTION_BITS;
    const word wa = F(to_word)(a), wb = F(to_word)(b);
    real ma = F(from_word)((wa & fraction) | one), mb = F(from_word)((wb & fraction) | one);
    real e = F(from_word)(MAGIC_WORD + (wa >> FRACTION_BITS) - (wb >> FRACTION_BITS)) - MAGIC;
    const real up = ma > mb * sqrt2 ? R(1.) : R(0.), down = mb > ma * sqrt2 ? R(1.) : R(0.);
    e = e + (up - down);
    ma = ma - R(0.5) * up * ma;
    /* 2^-exponent of b, for d */
    const real unit = F(from_word)(((word)(2 * EXPONENT_ONE) << FRACTION_BITS) - (wb & ~fraction));
    const real half = R(1.) - R(0.5) * down;
    mb = mb * half;
    const real difference = e == 0 ? d * unit * half : ma - mb;
    const real z = difference / (ma + mb), w = z * z;
#if REAL_BITS == 32
    const real p = c0 + w * (c1 + w * c2);
#else
    const real p = c0 + w * (c1 + w * (c2 + w * (c3 + w * (c4 + w * (c5 + w * c6)))));
#endif
    return e * ln2_high + (e * ln2_low + (z + z) + z * (w * p));
}

/* n ln 2 + l for a whole number n: n may be large, and its multiple of ln 2
 * must not be rounded before the sum. */
static inline real F(add_ln2)(real n, real l)
{
#if REAL_BITS == 32
    return (real)((double)n * 0.693147180559945309 + (double)l);
#else
    return n * 0.693147180560117704 + (n * -1.72394445256148348e-13 + l);
#endif
}

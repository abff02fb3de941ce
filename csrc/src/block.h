/* Template (see real.h).  A block of LANES symbols on its way from the call's
 * arrays to LLRs: load() brings every symbol to the same form, a kernel turns
 * that into LLRs bit by bit, store() writes them in the wanted type. */

struct F(block) {
    real v[2][LANES];           /* y / h in the plan's units, I and Q */
    double noise[LANES];        /* N0 / |h|^2 in the plan's units, at least LEAST_NOISE; infinite:
                                   no information */
    real lift[LANES];           /* what LLRs have to grow by where it was below LEAST_NOISE */
    real poison[LANES];         /* 0, or NaN where y, h or a prior is not usable */
    real prior[PDM_MAX_BITS][LANES];    /* positive means 0, over lift; set where has_prior */
    real llr[PDM_MAX_BITS][LANES];      /* positive means 0 */
    uint32_t label[LANES];      /* slicing: the nearest point */
    int has_prior;
    int same_noise;             /* noise and lift are the same in all lanes */
    int lifted;                 /* any lift is not 1 */
};

/* Samples far beyond any point are held there, so that what the kernels form
 * from coordinates alone stays finite. */
static inline real F(hold)(double x)
{
    return (real)(x < -FARTHEST ? -FARTHEST : x > FARTHEST ? FARTHEST : x);
}

/* x / noise in all lanes, for x > 0; 0 where there is no information. */
static inline void F(scale)(const struct F(block) *b, double x, real scale[LANES])
{
    if (b->same_noise) {
        const real one = (real)(x / b->noise[0]);
        EACH_LANE scale[i] = one;
    } else {
        EACH_LANE scale[i] = (real)(x / b->noise[i]);
    }
}

/* 0 for 0; for anything else the one NaN of which every machine keeps all bits. */
static inline real F(poison)(real x)
{
    return x == 0 ? 0 : F(from_word)((word)(2 * EXPONENT_ONE + 1) << FRACTION_BITS | (word)1 << (FRACTION_BITS - 1));
}

/* So small a noise variance would make metrics overflow and their differences
 * meaningless; LLRs are proportional to 1 / N0 down there. */
static inline void F(set_noise)(struct F(block) *b, int i, double noise)
{
    const double lift = LEAST_NOISE / noise;
    b->lift[i] = (real)(lift < 1 ? 1 : lift < (double)LARGEST ? lift : (double)LARGEST);
    b->noise[i] = noise > LEAST_NOISE ? noise : LEAST_NOISE;
}

/* y / h and N0 / |h|^2, in double whatever the type: for float32 the result is
 * then rounded once, and for float64 h is brought near 1 by a power of two
 * first, so that |h|^2 neither overflows nor loses digits. */
static inline void F(equalise)(struct F(block) *b, int i, const real *y, const real *h,
                               double unit)
{
    const double yr = (double)y[0] * 0.125, yi = (double)y[1] * 0.125;
    double hr = (double)h[0], hi = (double)h[1];
    const double size_r = hr < 0 ? -hr : hr, size_i = hi < 0 ? -hi : hi;
    const double size = size_r > size_i ? size_r : size_i;
    const union double_bits size_bits = {.r = size};
    int e = (int)(size_bits.w >> 52 & 2047) - 1023;
    e = e < -1000 ? -1000 : e > 1022 ? 1022 : e;
    const double down = power_of_two(-e);
    hr *= down;
    hi *= down;
    const double power = hr * hr + hi * hi;
    const int silent = !(power > 0);    /* h = 0, or NaN */
    const double back = 8 * down * unit, divisor = silent ? 1 : power;
    const real poison = F(poison)((real)((yr - yr) + (yi - yi) + (hr - hr) + (hi - hi)));
    const int usable = !silent && poison == 0;
    b->v[0][i] = usable ? F(hold)((yr * hr + yi * hi) / divisor * back) : 0;
    b->v[1][i] = usable ? F(hold)((yi * hr - yr * hi) / divisor * back) : 0;
    F(set_noise)(b, i, usable ? b->noise[i] * (unit * unit) * down / divisor * down : NO_INFORMATION);
    b->poison[i] = poison;
}

/* The block keeps from call to call what is the same for all symbols. */
static void F(load)(const struct pdm_call *call, size_t first, int count, struct F(block) *b)
{
    const struct pdm_plan *plan = call->plan;
    const double unit = plan->unit, square = unit * unit;
    const real *y = (const real *)call->y + 2 * first;
    real padded[2 * LANES];
    if (count < LANES) {    /* whole blocks only from here on */
        for (int i = 0; i < 2 * LANES; i++)
            padded[i] = i < 2 * count ? y[i] : 0;
        y = padded;
    }
    b->same_noise = !call->noise_stride && !call->gain;
    const real *noise = (const real *)call->noise;
    if (call->noise_stride)
        EACH_LANE b->noise[i] = (double)noise[first + (size_t)(i < count ? i : 0)];
    else if (first == 0 || !b->same_noise)
        EACH_LANE b->noise[i] = noise ? (double)noise[0] : 1;

    if (call->gain) {
        const real *gain = (const real *)call->gain + 2 * first * call->gain_stride;
        EACH_LANE F(equalise)(b, i, y + 2 * i,
                              gain + 2 * (size_t)(i < count ? i : 0) * call->gain_stride, unit);
    } else {
        const real u = (real)unit, most = (real)FARTHEST;
        EACH_LANE
        {
            const real yr = y[2 * i], yi = y[2 * i + 1];
            const real poison = F(poison)((yr - yr) + (yi - yi));
            const real vr = F(most)(F(least)(yr * u, most), -most);
            const real vi = F(most)(F(least)(yi * u, most), -most);
            b->v[0][i] = poison == 0 ? vr : 0;
            b->v[1][i] = poison == 0 ? vi : 0;
            b->poison[i] = poison;
        }
        if (first == 0 || !b->same_noise)
            EACH_LANE F(set_noise)(b, i, b->noise[i] * square);
    }
    if (first == 0 || !b->same_noise) {
        b->lifted = 0;
        EACH_LANE b->lifted |= b->lift[i] > 1;
    }

    b->has_prior = call->prior != 0;
    const int n = plan->bits;
    if (!call->prior)
        return;
    const real *prior = (const real *)call->prior + (size_t)n * first;
    const real sign = call->settings.positive_bit ? -R(1.) : R(1.);
    for (int k = 0; k < n; k++)
        EACH_LANE
        {
            const real p = i < count ? prior[i * n + k] * sign : 0;
            b->poison[i] = p == p ? b->poison[i] : F(poison)(p);
            b->prior[k][i] =
                p == p ? F(most)(-PRIOR_LIMIT, F(least)(p, PRIOR_LIMIT)) / b->lift[i] : 0;
        }
}

/* From LLRs by bit, positive meaning 0, to LLRs as they leave, symbol by symbol. */
BY_CONSTANT void F(finish)(const int n, const pdm_settings *settings, struct F(block) *b, real *llr)
{
    for (int k = 0; k < n; k++) {
        real *l = b->llr[k];
        const real *prior = b->prior[k];
        if (b->has_prior) {
            EACH_LANE l[i] = b->noise[i] < NO_INFORMATION ? l[i] : prior[i];
            if (settings->extrinsic)
                EACH_LANE l[i] -= prior[i];
        }
        /* What N0 makes grows; ln 2 of a tie and what the prior makes do not.
         * A difference of metrics is either 0 or beyond 1e6 down there. */
        if (b->lifted)
            EACH_LANE
            {
                const real known = b->has_prior && !settings->extrinsic ? prior[i] : 0;
                l[i] = F(magnitude)(l[i]) > R(1e6) ? l[i] * b->lift[i]
                                                   : l[i] - known + known * b->lift[i];
            }
        const real sign = settings->positive_bit ? -R(1.) : R(1.);
        EACH_LANE l[i] = sign * F(most)(F(least)(l[i], LARGEST), -LARGEST) + b->poison[i];
    }
    EACH_LANE for (int k = 0; k < n; k++) llr[i * n + k] = b->llr[k][i];
}

/* A word: rounded half to even by adding and taking off MAGIC, once the value
 * is within the word's limits; NaN becomes 0. */
static inline int F(to_counts)(real llr, real step, real limit)
{
    const real x = F(most)(F(least)(llr / step, limit), -limit);
    return llr == llr ? (int)((x + MAGIC) - MAGIC) : 0;
}

/* Write `count` LLRs (labels: symbols) from place `start` of the output on. */
static void F(store)(const struct pdm_call *call, size_t start, int count, const real *llr)
{
    const real step = (real)call->settings.word_step;
    const real limit = (real)((1 << (call->settings.word_bits - 1)) - 1);
    if (call->output == PDM_OUT_REAL) {
        real *out = (real *)call->out + start;
        if (out != llr)
            for (int p = 0; p < count; p++)
                out[p] = llr[p];
    } else if (call->output == PDM_OUT_I8) {
        int8_t *out = (int8_t *)call->out + start;
        for (int p = 0; p < count; p++)
            out[p] = (int8_t)F(to_counts)(llr[p], step, limit);
    } else {
        int16_t *out = (int16_t *)call->out + start;
        for (int p = 0; p < count; p++)
            out[p] = (int16_t)F(to_counts)(llr[p], step, limit);
    }
}

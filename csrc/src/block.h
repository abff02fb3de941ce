/* Template (see real.h).  A block of LANES symbols on its way from the call's
 * arrays to LLRs: load() brings every symbol to the same form, a kernel turns
 * that into LLRs bit by bit, store() writes them in the wanted type. */

struct F(block) {
    real v[2][LANES];           /* y / h in the plan's units, I and Q */
    double noise[LANES];        /* N0 / |h|^2 in the plan's units, at least LEAST_NOISE; infinite:
                                   no information */
    real lift[LANES];           /* what LLRs have to grow by where it was below LEAST_NOISE */
    real poison[LANES];         /* 0, or NaN where y, h or a prior is not usable */
    real prior[PDM_MAX_BITS][LANES];    /* positive means 0; set where has_prior */
    real llr[PDM_MAX_BITS][LANES];      /* positive means 0 */
    uint32_t label[LANES];      /* slicing: the nearest point */
    int has_prior;
};

/* Samples far beyond any point are held there, so that what the kernels form
 * from coordinates alone stays finite. */
static inline real F(hold)(double x)
{
    return (real)(x < -FARTHEST ? -FARTHEST : x > FARTHEST ? FARTHEST : x);
}

/* x / noise for x > 0; 0 where there is no information. */
static inline real F(over_noise)(double x, double noise) { return (real)(x / noise); }

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
static inline void F(equalise)(struct F(block) *b, int i, const real *y, const real *h, double noise,
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
    const real poison = (real)((yr - yr) + (yi - yi) + (hr - hr) + (hi - hi));
    const int usable = !silent && poison == 0;
    b->v[0][i] = usable ? F(hold)((yr * hr + yi * hi) / divisor * back) : 0;
    b->v[1][i] = usable ? F(hold)((yi * hr - yr * hi) / divisor * back) : 0;
    F(set_noise)(b, i, usable ? noise * (unit * unit) * down / divisor * down : NO_INFORMATION);
    b->poison[i] = poison;
}

static void F(load)(const struct pdm_call *call, size_t first, int count, struct F(block) *b)
{
    const struct pdm_plan *plan = call->plan;
    const real *y = (const real *)call->y + 2 * first;
    const real *noise = call->noise ? (const real *)call->noise + first * call->noise_stride : 0;
    const double unit = plan->unit;

    if (call->gain) {
        const real *gain = (const real *)call->gain + 2 * first * call->gain_stride;
        for (int i = 0; i < count; i++)
            F(equalise)(b, i, y + 2 * i, gain + 2 * (size_t)i * call->gain_stride,
                        noise ? (double)noise[(size_t)i * call->noise_stride] : 1, unit);
    } else {
        const real u = (real)unit;
        for (int i = 0; i < count; i++) {
            const real yr = y[2 * i], yi = y[2 * i + 1];
            const real poison = (yr - yr) + (yi - yi);
            b->v[0][i] = poison == 0 ? F(hold)((double)(yr * u)) : 0;
            b->v[1][i] = poison == 0 ? F(hold)((double)(yi * u)) : 0;
            b->poison[i] = poison;
        }
        const double square = unit * unit;
        for (int i = 0; i < count; i++)
            F(set_noise)(b, i, b->poison[i] == 0
                                   ? (noise ? (double)noise[(size_t)i * call->noise_stride] : 1) * square
                                   : NO_INFORMATION);
    }
    for (int i = count; i < LANES; i++) {
        b->v[0][i] = b->v[1][i] = b->poison[i] = 0;
        F(set_noise)(b, i, NO_INFORMATION);
    }

    b->has_prior = call->prior != 0;
    if (call->prior) {
        const int n = plan->bits;
        const real *prior = (const real *)call->prior + (size_t)n * first;
        const real sign = call->settings.positive_bit ? -R(1.) : R(1.);
        for (int k = 0; k < n; k++) {
            for (int i = 0; i < count; i++) {
                const real p = prior[(size_t)i * (size_t)n + (size_t)k] * sign;
                b->poison[i] = p == p ? b->poison[i] : p;
                b->prior[k][i] = p == p ? F(most)(-PRIOR_LIMIT, F(least)(p, PRIOR_LIMIT)) : 0;
            }
            for (int i = count; i < LANES; i++)
                b->prior[k][i] = 0;
        }
    }
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE b->prior[k][i] = call->prior ? b->prior[k][i] : 0;
}

/* The LLR of bit k as it leaves, whatever the output type. */
static inline real F(finish)(const struct pdm_settings *settings, const struct F(block) *b, int k,
                             int i)
{
    real l = b->llr[k][i];
    l = F(magnitude)(l) > R(1e6) ? l * b->lift[i] : l;  /* not the ln 2 of a tie */
    if (b->has_prior) {
        l = b->noise[i] < NO_INFORMATION ? l : b->prior[k][i];
        l = settings->extrinsic ? l - b->prior[k][i] : l;
    }
    l = F(most)(F(least)(l, LARGEST), -LARGEST);
    return (settings->positive_bit ? -l : l) + b->poison[i];
}

/* A word: rounded half to even by adding and taking off MAGIC, once the value
 * is within the word's limits; NaN becomes 0. */
static inline int F(to_counts)(real llr, real step, real limit)
{
    const real x = F(most)(F(least)(llr / step, limit), -limit);
    return llr == llr ? (int)((x + MAGIC) - MAGIC) : 0;
}

static void F(store)(const struct pdm_call *call, size_t first, int count, const struct F(block) *b)
{
    const size_t n = call->plan->bits, start = n * first;
    const pdm_settings *s = &call->settings;
    const real step = (real)s->word_step;
    const real limit = (real)((1 << (s->word_bits - 1)) - 1);

    switch (call->output) {
    case PDM_OUT_LABEL:
        for (int i = 0; i < count; i++)
            ((uint16_t *)call->out)[first + (size_t)i] =
                (uint16_t)(b->noise[i] < NO_INFORMATION ? b->label[i] : 0);
        break;
    case PDM_OUT_REAL:
        for (int i = 0; i < count; i++)
            for (size_t k = 0; k < n; k++)
                ((real *)call->out)[start + (size_t)i * n + k] = F(finish)(s, b, (int)k, i);
        break;
    case PDM_OUT_I8:
        for (int i = 0; i < count; i++)
            for (size_t k = 0; k < n; k++)
                ((int8_t *)call->out)[start + (size_t)i * n + k] =
                    (int8_t)F(to_counts)(F(finish)(s, b, (int)k, i), step, limit);
        break;
    case PDM_OUT_I16:
        for (int i = 0; i < count; i++)
            for (size_t k = 0; k < n; k++)
                ((int16_t *)call->out)[start + (size_t)i * n + k] =
                    (int16_t)F(to_counts)(F(finish)(s, b, (int)k, i), step, limit);
        break;
    }
}

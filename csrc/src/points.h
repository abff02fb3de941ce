/* Template (see real.h).  Points kernels: any labelled points, by the
 * definition; exact and max-log.
 *
 * Metrics are relative to the nearest point s, as on a grid: with w half the
 * way from s to the point and e from s to the sample, a point costs
 * 4 w.(e + w) / N0.  They are formed in double for both types: points need not
 * lie on round numbers, and the difference of two of them has to keep its
 * digits.  Labels are taken in chunks, whose low bits are summed by halving as
 * on an axis of a box.
 *
 * Where several points are equally near (the middle of a ring) the two parts of
 * the product w.(e + w) cancel, and at high Es/N0 what is left of a double would
 * not do for a float64 result.  There every coordinate is taken in two parts,
 * of which the first is a whole number of 2^-23: products of first parts
 * are then exact, and so is their sum. */

/* A number in two parts. */
struct F(pair) {
    double high, low;
};

/* Coordinates of points and of samples near them are below 4: with 23 bits
 * behind the point, a product of two differences has 2 (23 + 3) = 52 bits.  A
 * sample farther off stays whole; its products need no more than a double. */
static inline struct F(pair) F(two_parts)(double x)
{
#if REAL_BITS == 32
    const struct F(pair) parts = {x, 0};
#else
    const double round = 0x1.8p+52 * 0x1p-23, coarse = (x + round) - round;
    const double high = x > -4 && x < 4 ? coarse : x;
    const struct F(pair) parts = {high, x - high};
#endif
    return parts;
}

/* w (e + w), w = (s - x) / 2, e from s to the sample. */
static inline struct F(pair) F(axis_product)(struct F(pair) s, struct F(pair) x, struct F(pair) e)
{
    const double w = (s.high - x.high) * 0.5, t = e.high + w;
#if REAL_BITS == 32
    const struct F(pair) product = {w * t, 0};
#else
    const double w_low = (s.low - x.low) * 0.5, t_low = e.low + w_low;
    const struct F(pair) product = {w * t, w * t_low + w_low * t + w_low * t_low};
#endif
    return product;
}

struct F(cloud) {
    const struct pdm_plan *plan;
    const struct F(block) *block;
    double s_high[2][LANES], s_low[2][LANES];   /* the nearest point */
    double e_high[2][LANES], e_low[2][LANES];   /* from there to the sample */
    double scale[LANES], per_nat;               /* units of metrics, as in boxes.h */
    int low_bits, chunks;
    real low_cost[1 << CHUNK_BITS][LANES];   /* priors of the low bits, by slot */
};

/* The nearest point of each lane, found relative to the point of label 0. */
static void F(points_nearest)(const struct pdm_plan *plan, const struct F(block) *b,
                              uint32_t nearest[LANES])
{
    const double *x = pdm_points(plan), *y = x + plan->order;
    double ex[LANES], ey[LANES], best[LANES];
    EACH_LANE
    {
        ex[i] = (double)b->v[0][i] - x[0];
        ey[i] = (double)b->v[1][i] - y[0];
        best[i] = 0;
        nearest[i] = 0;
    }
    for (uint32_t j = 1; j < plan->order; j++) {
        const double wx = (x[0] - x[j]) * 0.5, wy = (y[0] - y[j]) * 0.5;
        EACH_LANE
        {
            const double m = wx * (ex[i] + wx) + wy * (ey[i] + wy);
            nearest[i] = m < best[i] ? j : nearest[i];
            best[i] = m < best[i] ? m : best[i];
        }
    }
}

static inline real F(prior_cost)(const struct F(cloud) *c, int k, int value, int i)
{
    const real prior = c->block->prior[k][i];
    return F(most)(value ? prior : -prior, 0) * (real)c->per_nat;
}

static void F(prepare_cloud)(const struct pdm_plan *plan, const struct F(block) *b,
                             struct F(cloud) *c)
{
    uint32_t nearest[LANES];
    F(points_nearest)(plan, b, nearest);
    c->plan = plan;
    c->block = b;
    for (size_t axis = 0; axis < 2; axis++)
        EACH_LANE
        {
            const struct F(pair) s = F(two_parts)(pdm_points(plan)[axis * plan->order + nearest[i]]);
            const struct F(pair) v = F(two_parts)((double)b->v[axis][i]);
            c->s_high[axis][i] = s.high;
            c->s_low[axis][i] = s.low;
            c->e_high[axis][i] = v.high - s.high;
            c->e_low[axis][i] = v.low - s.low;
        }
    c->low_bits = plan->bits < CHUNK_BITS ? plan->bits : CHUNK_BITS;
    c->chunks = 1 << (plan->bits - c->low_bits);
}

static void F(set_units)(double per_nat, struct F(cloud) *c)
{
    const struct F(block) *b = c->block;
    c->per_nat = per_nat;
    EACH_LANE c->scale[i] = 4 * per_nat / b->noise[i];
    if (b->has_prior)
        for (int s = 0; s < 1 << c->low_bits; s++) {
            EACH_LANE c->low_cost[s][i] = 0;
            for (int p = 0; p < c->low_bits; p++)
                EACH_LANE c->low_cost[s][i] +=
                    F(prior_cost)(c, c->plan->bits - 1 - p, s >> p & 1, i);
        }
}

/* Value of label bit k in all labels of a chunk (k among the high bits). */
static inline int F(chunk_bit)(const struct F(cloud) *c, int chunk, int k)
{
    return chunk >> (c->plan->bits - c->low_bits - 1 - k) & 1;
}

/* Metrics of the labels of a chunk, priors added. */
static void F(chunk_metrics)(const struct F(cloud) *c, int chunk, real slot[1 << CHUNK_BITS][LANES])
{
    const int count = 1 << c->low_bits;
    const double *x = pdm_points(c->plan) + (size_t)chunk * (size_t)count, *y = x + c->plan->order;
    for (int s = 0; s < count; s++) {
        const struct F(pair) px = F(two_parts)(x[s]), py = F(two_parts)(y[s]);
        EACH_LANE
        {
            const struct F(pair) sx = {c->s_high[0][i], c->s_low[0][i]},
                                 sy = {c->s_high[1][i], c->s_low[1][i]},
                                 ex = {c->e_high[0][i], c->e_low[0][i]},
                                 ey = {c->e_high[1][i], c->e_low[1][i]};
            const struct F(pair) a = F(axis_product)(sx, px, ex), b = F(axis_product)(sy, py, ey);
            const double m = c->scale[i] * ((a.high + b.high) + (a.low + b.low));
            slot[s][i] = (real)(m < (double)LARGEST ? m : (double)LARGEST);
        }
    }
    if (c->block->has_prior) {
        real cost[LANES];
        EACH_LANE cost[i] = 0;
        for (int k = 0; k < c->plan->bits - c->low_bits; k++)
            EACH_LANE cost[i] +=
                F(prior_cost)(c, k, F(chunk_bit)(c, chunk, k), i);
        for (int s = 0; s < count; s++)
            EACH_LANE slot[s][i] =
                F(least)(slot[s][i] + (cost[i] + c->low_cost[s][i]), LARGEST);
    }
}

/* The least metric of each bit value. */
static void F(points_least)(const struct F(cloud) *c, real best[PDM_MAX_BITS][2][LANES])
{
    real slot[1 << CHUNK_BITS][LANES], half[PDM_MAX_PATTERNS][2][LANES];
    const int high = c->plan->bits - c->low_bits;
    for (int k = 0; k < c->plan->bits; k++)
        EACH_LANE best[k][0][i] = best[k][1][i] = LARGEST;
    for (int chunk = 0; chunk < c->chunks; chunk++) {
        F(chunk_metrics)(c, chunk, slot);
        F(halve_least)(c->low_bits, slot, half);
        for (int k = 0; k < c->plan->bits; k++)
            for (int value = 0; value < 2; value++) {
                const real *h = k >= high ? half[k - high][value] : slot[0];
                if (k >= high || F(chunk_bit)(c, chunk, k) == value)
                    EACH_LANE best[k][value][i] = F(least)(best[k][value][i], h[i]);
            }
    }
}

APART void F(points_max_log)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(cloud) c;
    real best[PDM_MAX_BITS][2][LANES];
    F(prepare_cloud)(plan, b, &c);
    F(set_units)(1, &c);
    F(points_least)(&c, best);
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE b->llr[k][i] = best[k][1][i] - best[k][0][i];
}

/* The sums of all bits in question relative to the nearest point with that bit
 * value, for blocks in which a sum relative to the nearest point of all has
 * lost terms to underflow. */
APART void F(points_far)(struct F(cloud) *c, const uint8_t far[PDM_MAX_BITS],
                          struct F(block) *b)
{
    const int n = c->plan->bits, count = 1 << c->low_bits;
    real slot[1 << CHUNK_BITS][LANES], best[PDM_MAX_BITS][2][LANES], sum[PDM_MAX_BITS][2][LANES];
    F(set_units)(1, c);
    F(points_least)(c, best);
    for (int k = 0; k < n; k++)
        EACH_LANE sum[k][0][i] = sum[k][1][i] = 0;
    for (int chunk = 0; chunk < c->chunks; chunk++) {
        F(chunk_metrics)(c, chunk, slot);
        for (int s = 0; s < count; s++)
            for (int k = 0; k < n; k++) {
                if (!far[k])
                    continue;
                const int value = (chunk * count + s) >> (n - 1 - k) & 1;
                real way[LANES];
                int any = 0;
                EACH_LANE way[i] = slot[s][i] - best[k][value][i];
                EACH_LANE any |= way[i] < NEGLIGIBLE;
                if (any)
                    EACH_LANE sum[k][value][i] += way[i] < NEGLIGIBLE ? F(exp_minus)(way[i]) : 0;
            }
    }
    for (int k = 0; k < n; k++)
        if (far[k])
            EACH_LANE
            {
                const real l = (best[k][1][i] - best[k][0][i]) +
                               F(log_ratio)(sum[k][0][i], sum[k][1][i],
                                              sum[k][0][i] - sum[k][1][i]);
                b->llr[k][i] = F(magnitude)(b->llr[k][i]) > LARGEST_RATIO ? l : b->llr[k][i];
            }
}

APART void F(points_exact)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(cloud) c;
    real slot[1 << CHUNK_BITS][LANES], half[PDM_MAX_PATTERNS][2][LANES], least[LANES];
    real difference[PDM_MAX_PATTERNS][LANES];
    real sum[PDM_MAX_BITS][3][LANES], lost[PDM_MAX_BITS][3][LANES], best[PDM_MAX_BITS][2][LANES];
    uint8_t far[PDM_MAX_BITS];
    F(prepare_cloud)(plan, b, &c);
    F(set_units)(LOG2_E, &c);
    const int high = plan->bits - c.low_bits;

    EACH_LANE least[i] = 0;
    if (b->has_prior) {
        F(points_least)(&c, best);
        EACH_LANE least[i] = F(least)(best[0][0][i], best[0][1][i]);
    }
    for (int k = 0; k < plan->bits; k++)
        for (int value = 0; value < 3; value++)
            EACH_LANE sum[k][value][i] = lost[k][value][i] = 0;
    for (int chunk = 0; chunk < c.chunks; chunk++) {
        F(chunk_metrics)(&c, chunk, slot);
        for (int s = 0; s < 1 << c.low_bits; s++)
            EACH_LANE
            {
                real n;
                const real power = F(split_exp2)(slot[s][i] - least[i], 0, &n);
                slot[s][i] = power * F(half_to_the)(n);
            }
        F(differences)(c.low_bits, slot, difference);
        F(halve_sum)(c.low_bits, slot, half);
        for (int k = 0; k < plan->bits; k++)
            for (int value = 0; value < 3; value++) {
                const real *h = k < high    ? slot[0]
                                : value < 2 ? half[k - high][value]
                                            : difference[k - high];
                const int bit = k < high ? F(chunk_bit)(&c, chunk, k) : value;
                const real sign = value == 2 && k < high && bit ? -R(1.) : R(1.);
                if (value < 2 && bit != value)
                    continue;
                /* Kahan's compensated sum over up to 1024 chunks: one after
                 * another they would add up rounding errors */
                EACH_LANE
                {
                    const real old = sum[k][value][i], term = sign * h[i] - lost[k][value][i];
                    sum[k][value][i] = old + term;
                    lost[k][value][i] = (sum[k][value][i] - old) - term;
                }
            }
    }
    int any = 0;
    for (int k = 0; k < plan->bits; k++) {
        far[k] = 0;
        EACH_LANE
        {
            b->llr[k][i] = F(log_ratio)(F(most)(sum[k][0][i], SMALLEST),
                                        F(most)(sum[k][1][i], SMALLEST), sum[k][2][i]);
            far[k] |= F(magnitude)(b->llr[k][i]) > LARGEST_RATIO;
        }
        any |= far[k];
    }
    if (any)
        F(points_far)(&c, far, b);
}

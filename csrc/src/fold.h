/* Template (see real.h).  Fold kernels: a Gray grid, max-log and linear.
 *
 * Folding the coordinate u from the grid's centre, v_0 = u and v_{d+1} = |v_d| - 2^(p-1-d) a for 2^p
 * levels of half-spacing a, makes |v_d| the distance x to the nearest
 * threshold of the bit at depth d.  With r whole spacings between threshold
 * and sample, at most the R levels that the grid has there,
 *     |LLR| = ((x + a)^2 - (x - (2 r + 1) a)^2) / N0 = 4 a (r + 1) (x - r a) / N0:
 * a product, which keeps its digits where the difference of the two squared
 * distances (or of their roots) would lose them far from the grid.  Neighbouring
 * r give the same value where they meet, so it does not matter which of the two
 * a rounding error picks there.
 *
 * Lanes are places in the output, not symbols: each takes its own coordinate
 * and folds it as often as its bit needs, and the results are already in their
 * order.  A transposition would cost more than all the folding. */

/* What each place in the output of a block does. */
struct F(fold_table) {
    word from_q[PDM_MAX_BITS * LANES];          /* all ones: takes Q, else I */
    word turn[PDM_MAX_BITS * LANES];            /* sign bit: beyond the threshold the bit is 1 */
    real most[PDM_MAX_BITS * LANES];            /* R */
    real slope[PDM_MAX_BITS * LANES];           /* 4 a / N0, if it is the same for all symbols */
    real a[PDM_MAX_BITS * LANES], per_spacing[PDM_MAX_BITS * LANES];
    struct {
        word keep[PDM_MAX_BITS * LANES];        /* without the sign bit: fold once more */
        real threshold[PDM_MAX_BITS * LANES];
    } step[PDM_MAX_PATTERNS - 1];
    int steps;
    int order;
};

APART void F(make_fold_table)(const struct pdm_plan *plan, int linear, int positive_bit,
                               struct F(fold_table) *table)
{
    const int n = plan->bits;
    const word sign = (word)1 << (REAL_BITS - 1);
    table->steps = 0;
    for (int axis = 0; axis < 2; axis++) {
        const struct pdm_fold *fold = &plan->fold[axis];
        const real a = (real)plan->half_spacing[axis];
        if (fold->depths - 1 > table->steps)
            table->steps = fold->depths - 1;
        for (int d = 0; d < fold->depths; d++) {
            const int p = fold->bit[d], inner = fold->depths - 1 - d;
            table->from_q[p] = axis ? ~(word)0 : 0;
            table->turn[p] = fold->negative[d] ^ positive_bit ? sign : 0;
            table->most[p] = linear ? 0 : (real)((1 << inner) - 1);
            table->a[p] = a;
            table->per_spacing[p] = R(0.5) / a;
            for (int s = 0; s < PDM_MAX_PATTERNS - 1; s++) {
                table->step[s].keep[p] = s < d ? ~sign : ~(word)0;
                table->step[s].threshold[p] = s < d ? a * (real)(1 << (fold->depths - 1 - s)) : 0;
            }
        }
    }
    int halves = 1, turns = 1;
    for (int p = 0; p < n; p++) {
        halves &= (table->from_q[p] != 0) == (2 * p >= n);
        turns &= (table->from_q[p] != 0) == p % 2;
    }
    table->order = halves ? BITS_IN_HALVES : turns ? BITS_IN_TURN : BITS_ANYHOW;
    for (int p = n; p < n * LANES; p++) {
        table->from_q[p] = table->from_q[p - n];
        table->turn[p] = table->turn[p - n];
        table->most[p] = table->most[p - n];
        table->a[p] = table->a[p - n];
        table->per_spacing[p] = table->per_spacing[p - n];
        for (int s = 0; s < PDM_MAX_PATTERNS - 1; s++) {
            table->step[s].keep[p] = table->step[s].keep[p - n];
            table->step[s].threshold[p] = table->step[s].threshold[p - n];
        }
    }
}

/* wide[place] = the value of the place's symbol and axis, from values in turn
 * for I and Q.  The two usual orders of the bits, first half on I or every
 * second one, are known to the compiler, which then needs one permutation. */
BY_CONSTANT void F(spread)(const int n, const struct F(fold_table) *table, const real *restrict iq,
                           real *restrict wide)
{
    if (n % 2 == 0 && table->order == BITS_IN_HALVES) {
        for (int i = 0; i < LANES; i++)
            for (int k = 0; k < n; k++)
                wide[i * n + k] = iq[2 * i + (2 * k >= n)];
    } else if (n % 2 == 0 && table->order == BITS_IN_TURN) {
        for (int i = 0; i < LANES; i++)
            for (int k = 0; k < n; k++)
                wide[i * n + k] = iq[2 * i + k % 2];
    } else {
        real other[PDM_MAX_BITS * LANES];
        for (int i = 0; i < LANES; i++)
            for (int k = 0; k < n; k++)
                wide[i * n + k] = iq[2 * i];
        for (int i = 0; i < LANES; i++)
            for (int k = 0; k < n; k++)
                other[i * n + k] = iq[2 * i + 1];
        for (int p = 0; p < n * LANES; p++)
            wide[p] = table->from_q[p] ? other[p] : wide[p];
    }
}

BY_CONSTANT void F(slopes)(const int n, const struct pdm_plan *plan, const struct F(block) *b,
                         const struct F(fold_table) *table, real *slope)
{
    real axis_slope[2][LANES], iq[2 * LANES];
    for (int axis = 0; axis < 2; axis++)
        F(scale)(b, 4 * plan->half_spacing[axis], axis_slope[axis]);
    EACH_LANE
    {
        iq[2 * i] = axis_slope[0][i];
        iq[2 * i + 1] = axis_slope[1][i];
    }
    F(spread)(n, table, iq, slope);
}

BY_CONSTANT void F(fold_places)(const int n, const int steps, const struct F(fold_table) *table,
                                const real *slope, const real *restrict v, real *restrict llr)
{
    for (int p = 0; p < n * LANES; p++) {
        const word sign = (word)1 << (REAL_BITS - 1);
        real u = v[p];
        for (int s = 0; s < steps; s++)
            u = F(from_word)(F(to_word)(u) & table->step[s].keep[p]) - table->step[s].threshold[p];
        const real x = F(magnitude)(u);
        const real r = F(least)((x * table->per_spacing[p] - R(0.5) + MAGIC) - MAGIC, table->most[p]);
        const real l = slope[p] * (r + 1) * (x - r * table->a[p]);
        const real held = l > LARGEST ? LARGEST : l;    /* NaN stays */
        llr[p] = F(from_word)(F(to_word)(held) ^ (F(to_word)(u) & sign) ^ table->turn[p]);
    }
}

BY_CONSTANT void F(fold)(const int n, const struct pdm_plan *plan,
                         const struct F(fold_table) *table, const struct F(block) *b, real *llr)
{
    real v[PDM_MAX_BITS * LANES], each_slope[PDM_MAX_BITS * LANES], iq[2 * LANES];
    const real centre_i = (real)plan->centre[0], centre_q = (real)plan->centre[1];
    const real *slope = table->slope;
    const int even = (n + 1) / 2 - 1;   /* steps of a square, a constant */
    if (!b->same_noise) {
        F(slopes)(n, plan, b, table, each_slope);
        slope = each_slope;
    }
    EACH_LANE
    {
        iq[2 * i] = b->v[0][i] - centre_i + b->poison[i];
        iq[2 * i + 1] = b->v[1][i] - centre_q + b->poison[i];
    }
    F(spread)(n, table, iq, v);
    if (table->steps <= even)
        F(fold_places)(n, even, table, slope, v, llr);
    else
        F(fold_places)(n, table->steps, table, slope, v, llr);
}

/* What fold() leaves out because it hardly ever happens: N0 below LEAST_NOISE,
 * and a prior (rule linear only, max-log then takes boxes.h). */
APART void F(fold_rarities)(const struct pdm_plan *plan, const struct F(block) *b,
                             const pdm_settings *settings, real *llr)
{
    const int n = plan->bits;
    for (int i = 0; i < LANES; i++)
        for (int k = 0; k < n; k++) {
            real l = llr[i * n + k] * b->lift[i];
            if (b->has_prior && !settings->extrinsic)
                l += (settings->positive_bit ? -b->prior[k][i] : b->prior[k][i]) * b->lift[i];
            llr[i * n + k] = l > LARGEST ? LARGEST : l < -LARGEST ? -LARGEST : l;
        }
}

/* Template (see real.h).  Fold kernels: a Gray grid, max-log and linear.
 *
 * Folding the coordinate, v_0 = u and v_{d+1} = |v_d| - 2^(p-1-d) a for 2^p
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
    real a[PDM_MAX_BITS * LANES], per_spacing[PDM_MAX_BITS * LANES];
    struct {
        word keep[PDM_MAX_BITS * LANES];        /* without the sign bit: fold once more */
        real threshold[PDM_MAX_BITS * LANES];
    } step[PDM_MAX_PATTERNS - 1];
    int steps;
};

static void F(make_fold_table)(const struct pdm_plan *plan, int linear, int positive_bit,
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
    for (int p = n; p < n * LANES; p++) {
        table->from_q[p] = table->from_q[p - n];
        table->turn[p] = table->turn[p - n];
        table->most[p] = table->most[p - n];
        table->a[p] = table->a[p - n];
        table->per_spacing[p] = table->per_spacing[p - n];
        for (int s = 0; s < table->steps; s++) {
            table->step[s].keep[p] = table->step[s].keep[p - n];
            table->step[s].threshold[p] = table->step[s].threshold[p - n];
        }
    }
}

static inline void F(fold)(const int n, const struct pdm_plan *plan,
                           const struct F(fold_table) *table, const struct F(block) *b, real *llr)
{
    real v[PDM_MAX_BITS * LANES], slope[PDM_MAX_BITS * LANES], axis_slope[2][LANES];
    for (int axis = 0; axis < 2; axis++)
        F(scale)(b, 4 * plan->half_spacing[axis], axis_slope[axis]);
    EACH_LANE
    {
        const real u = b->v[0][i] - (real)plan->centre[0] + b->poison[i];
        const real w = b->v[1][i] - (real)plan->centre[1] + b->poison[i];
        for (int k = 0; k < n; k++) {
            const int p = i * n + k;
            v[p] = table->from_q[p] ? w : u;
            slope[p] = table->from_q[p] ? axis_slope[1][i] : axis_slope[0][i];
        }
    }
    for (int s = 0; s < table->steps; s++)
        for (int p = 0; p < n * LANES; p++)
            v[p] = F(from_word)(F(to_word)(v[p]) & table->step[s].keep[p]) -
                   table->step[s].threshold[p];
    for (int p = 0; p < n * LANES; p++) {
        const word sign = (word)1 << (REAL_BITS - 1);
        const real x = F(magnitude)(v[p]);
        const real r = F(least)((x * table->per_spacing[p] - R(0.5) + MAGIC) - MAGIC, table->most[p]);
        const real l = slope[p] * (r + 1) * (x - r * table->a[p]);
        const real held = l > LARGEST ? LARGEST : l;    /* NaN stays */
        llr[p] = F(from_word)(F(to_word)(held) ^ (F(to_word)(v[p]) & sign) ^ table->turn[p]);
    }
}

/* What fold() leaves out because it hardly ever happens: N0 below LEAST_NOISE,
 * and a prior (rule linear only, max-log then takes boxes.h). */
static void F(fold_rarities)(const struct pdm_plan *plan, const struct F(block) *b,
                             const pdm_settings *settings, real *llr)
{
    const int n = plan->bits;
    for (int i = 0; i < LANES; i++)
        for (int k = 0; k < n; k++) {
            real l = llr[i * n + k] * b->lift[i];
            if (b->has_prior && !settings->extrinsic)
                l += settings->positive_bit ? -b->prior[k][i] : b->prior[k][i];
            llr[i * n + k] = l > LARGEST ? LARGEST : l < -LARGEST ? -LARGEST : l;
        }
}

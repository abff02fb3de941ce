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
 * a rounding error picks there. */

static void F(fold_max_log)(const struct pdm_plan *plan, struct F(block) *b, int linear)
{
    for (int axis = 0; axis < 2; axis++) {
        const struct pdm_fold *fold = &plan->fold[axis];
        const real a = (real)plan->half_spacing[axis], centre = (real)plan->centre[axis];
        const real per_spacing = R(0.5) / a;
        real threshold = a * (real)(1 << fold->depths) * R(0.5), v[LANES], slope[LANES];
        EACH_LANE v[i] = b->v[axis][i] - centre;
        EACH_LANE slope[i] = F(over_noise)(4 * plan->half_spacing[axis], b->noise[i]);
        for (int d = 0; d < fold->depths; d++) {
            real *llr = b->llr[fold->bit[d]];
            const real sign = fold->negative[d] ? -R(1.) : R(1.);
            const real most = linear ? 0 : (real)((1 << (fold->depths - 1 - d)) - 1);
            EACH_LANE
            {
                const real x = F(magnitude)(v[i]);
                const real r = F(least)((x * per_spacing - R(0.5) + MAGIC) - MAGIC, most);
                const real l = slope[i] * (r + 1) * (x - r * a);
                llr[i] = v[i] < 0 ? -sign * l : sign * l;
                v[i] = x - threshold;
            }
            threshold = threshold * R(0.5);
        }
    }
}

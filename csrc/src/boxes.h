/* Template (see real.h).  Box kernels: a grid that splits into a few products
 * of axes; exact and max-log.
 *
 * Within a box every label bit belongs to one axis, so the sum over the box's
 * points with b_k = value is (sum over that axis with b_k = value) x (sum over
 * the other axis), and the box costs its levels, not its points.  The levels
 * of an axis are put into slots by the values of the axis's bits; halving the
 * slots bit after bit gives the sums of every bit in about three additions a
 * slot, and adds in pairs, which keeps rounding errors small.  Max-log is the
 * same with (minimum, +) for (+, x).
 *
 * Metrics are -ln of the weights, relative to the point nearest to the sample:
 * a level i spacings from that point's, which the sample misses by e spacings
 * of a, costs 4 a^2 / N0 i (i + e).  The difference of two squared distances
 * would lose its digits. */

/* Number of the level nearest to the sample on each axis of the whole grid. */
static inline void F(grid_nearest)(const struct pdm_plan *plan, const struct F(block) *b,
                                   real number[2][LANES])
{
    for (int axis = 0; axis < 2; axis++) {
        const real centre = (real)plan->centre[axis], last = (real)(plan->levels[axis] - 1);
        const real per_spacing = (real)(0.5 / plan->half_spacing[axis]);
        EACH_LANE
        {
            const real x = (b->v[axis][i] - centre) * per_spacing + last * R(0.5);
            number[axis][i] = (F(most)(F(least)(x, last), 0) + MAGIC) - MAGIC;
        }
    }
}

/* Metrics of all levels of an axis relative to level number[].  The half-spacing
 * is taken in two parts, of which the first has so few digits that its
 * multiples are exact: e then has no rounding error of the level's size. */
static inline void F(axis_metrics)(const struct pdm_plan *plan, int axis, const struct F(block) *b,
                                   const real number[LANES], real metric[PDM_MAX_LEVELS][LANES])
{
    const int levels = plan->levels[axis];
    const real a = (real)plan->half_spacing[axis], centre = (real)plan->centre[axis];
    const real a_high = (a + a * SPLIT) - a * SPLIT;
    const real a_low = (real)(plan->half_spacing[axis] - (double)a_high);
    const real per_a = (real)(1 / plan->half_spacing[axis]), last = (real)(levels - 1);
    real e[LANES], scale[LANES];
    EACH_LANE
    {
        const real level = number[i] + number[i] - last;
        e[i] = ((b->v[axis][i] - centre - level * a_high) - level * a_low) * per_a;
        scale[i] = F(over_noise)(plan->spacing_squared[axis], b->noise[i]);
    }
    for (int j = 0; j < levels; j++)
        EACH_LANE
        {
            const real spacings = number[i] - (real)j;
            const real m = scale[i] * (spacings * (spacings + e[i]));
            metric[j][i] = F(most)(F(least)(m, LARGEST), -LARGEST);
        }
}

/* The nearest point of the grid: levels on both axes, and the label.  Where the
 * grid has holes, it need not be where the nearest levels cross. */
static void F(nearest_point)(const struct pdm_plan *plan, const struct F(block) *b,
                             real metric[2][PDM_MAX_LEVELS][LANES], real number[2][LANES],
                             uint32_t label[LANES])
{
    real best[LANES];
    F(grid_nearest)(plan, b, number);
    F(axis_metrics)(plan, 0, b, number[0], metric[0]);
    F(axis_metrics)(plan, 1, b, number[1], metric[1]);
    EACH_LANE best[i] = LARGEST;
    EACH_LANE label[i] = 0;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        real near[2][LANES];
        uint32_t slot[3][LANES], level_of[2][LANES], candidate[LANES];
        for (int axis = 0; axis < 2; axis++) {
            const struct pdm_level *level = pdm_levels(plan, box, axis);
            EACH_LANE near[axis][i] = metric[axis][level[0].number][i];
            EACH_LANE slot[axis][i] = level[0].slot;
            EACH_LANE level_of[axis][i] = level[0].number;
            for (int j = 1; j < box->axis[axis].count; j++) {
                const real *m = metric[axis][level[j].number];
                const uint32_t s = level[j].slot, number_of = level[j].number;
                EACH_LANE slot[axis][i] = m[i] < near[axis][i] ? s : slot[axis][i];
                EACH_LANE level_of[axis][i] = m[i] < near[axis][i] ? number_of : level_of[axis][i];
                EACH_LANE near[axis][i] = F(least)(m[i], near[axis][i]);
            }
        }
        EACH_LANE slot[2][i] = candidate[i] = 0;
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            const int shift = bit.axis == 2 ? 0 : box->axis[bit.axis].patterns - 1 - bit.pattern;
            EACH_LANE candidate[i] =
                candidate[i] << 1 | ((slot[bit.axis][i] >> shift & 1) ^ (uint32_t)bit.invert);
        }
        EACH_LANE
        {
            const int better = x == 0 || near[0][i] + near[1][i] < best[i];
            label[i] = better ? candidate[i] : label[i];
            number[0][i] = better ? (real)(int32_t)level_of[0][i] : number[0][i];
            number[1][i] = better ? (real)(int32_t)level_of[1][i] : number[1][i];
            best[i] = better ? near[0][i] + near[1][i] : best[i];
        }
    }
}

static void F(boxes_slice)(const struct pdm_plan *plan, struct F(block) *b)
{
    real metric[2][PDM_MAX_LEVELS][LANES], number[2][LANES];
    F(nearest_point)(plan, b, metric, number, b->label);
}

/* Metrics of both axes, relative to the nearest point: with one box that is
 * where the nearest levels cross.  With more, metrics relative to a crossing
 * that is no point would be large where the LLR is small. */
static void F(grid_metrics)(const struct pdm_plan *plan, const struct F(block) *b,
                            real metric[2][PDM_MAX_LEVELS][LANES])
{
    real number[2][LANES];
    uint32_t label[LANES];
    if (plan->boxes == 1)
        F(grid_nearest)(plan, b, number);
    else
        F(nearest_point)(plan, b, metric, number, label);
    F(axis_metrics)(plan, 0, b, number[0], metric[0]);
    F(axis_metrics)(plan, 1, b, number[1], metric[1]);
}

/* Metrics by slot for one axis of a box, the prior of the axis's bits added;
 * a slot without a level gets the largest metric.  Returns the slots. */
static inline int F(slot_metrics)(const struct pdm_plan *plan, const struct pdm_box *box, int axis,
                                  const struct F(block) *b, real metric[PDM_MAX_LEVELS][LANES],
                                  real slot[PDM_MAX_LEVELS][LANES])
{
    const struct pdm_level *level = pdm_levels(plan, box, axis);
    const int patterns = box->axis[axis].patterns, slots = 1 << patterns;
    const int count = box->axis[axis].count;
    if (count < slots)
        for (int s = 0; s < slots; s++)
            EACH_LANE slot[s][i] = LARGEST;
    if (!b->has_prior) {
        for (int j = 0; j < count; j++)
            EACH_LANE slot[level[j].slot][i] = metric[level[j].number][i];
        return slots;
    }
    /* What each pattern value costs; both costs >= 0, one of them 0 where a
     * pattern stands for one bit, so that nothing cancels. */
    real cost[PDM_MAX_PATTERNS][2][LANES];
    for (int p = 0; p < patterns; p++)
        EACH_LANE cost[p][0][i] = cost[p][1][i] = 0;
    for (int k = 0; k < plan->bits; k++) {
        const struct pdm_bit bit = box->bit[k];
        if (bit.axis == axis)
            EACH_LANE
            {
                cost[bit.pattern][bit.invert][i] += F(most)(-b->prior[k][i], 0);
                cost[bit.pattern][1 - bit.invert][i] += F(most)(b->prior[k][i], 0);
            }
    }
    for (int j = 0; j < count; j++) {
        const unsigned s = level[j].slot;
        EACH_LANE slot[s][i] = metric[level[j].number][i];
        for (int p = 0; p < patterns; p++)
            EACH_LANE slot[s][i] =
                F(least)(slot[s][i] + cost[p][s >> (patterns - 1 - p) & 1][i], LARGEST);
    }
    return slots;
}

/* The cost in a box of bits that are the same all over it. */
static inline void F(constant_cost)(const struct pdm_plan *plan, const struct pdm_box *box,
                                    const struct F(block) *b, real cost[LANES])
{
    EACH_LANE cost[i] = 0;
    if (b->has_prior)
        for (int k = 0; k < plan->bits; k++)
            if (box->bit[k].axis == 2)
                EACH_LANE cost[i] +=
                    F(most)(box->bit[k].invert ? b->prior[k][i] : -b->prior[k][i], 0);
}

/* side[0] = all of side[], combined in pairs. */
#define REDUCE(side, count, combine)                                                            \
    for (int step = (count) / 2; step > 0; step /= 2)                                           \
        for (int s = 0; s < step; s++)                                                          \
            EACH_LANE side[s][i] = combine(side[s][i], side[s + step][i]);
#define PLUS(a, b) ((a) + (b))

/* Halve the slots until one is left: half[p][value] becomes the minimum over
 * the slots whose pattern p has that value, slot[0] that over all.  The slots
 * are overwritten. */
static inline void F(halve_least)(int patterns, real slot[PDM_MAX_LEVELS][LANES],
                                  real half[PDM_MAX_PATTERNS][2][LANES])
{
    real side[PDM_MAX_LEVELS / 2][LANES];
    for (int p = 0; p < patterns; p++) {
        const int rest = 1 << (patterns - 1 - p);
        for (int value = 0; value < 2; value++) {
            for (int s = 0; s < rest; s++)
                EACH_LANE side[s][i] = slot[value * rest + s][i];
            REDUCE(side, rest, F(least))
            EACH_LANE half[p][value][i] = side[0][i];
        }
        for (int s = 0; s < rest; s++)
            EACH_LANE slot[s][i] = F(least)(slot[s][i], slot[rest + s][i]);
    }
}

/* The same for sums, and half[p][2] their difference: summed from differences
 * of slots that differ in this pattern alone, it keeps its digits where the two
 * sums are nearly equal. */
static inline void F(halve_sum)(int patterns, real slot[PDM_MAX_LEVELS][LANES],
                                real half[PDM_MAX_PATTERNS][3][LANES])
{
    real side[PDM_MAX_LEVELS / 2][LANES];
    for (int p = 0; p < patterns; p++) {
        const int rest = 1 << (patterns - 1 - p);
        for (int value = 0; value < 3; value++) {
            for (int s = 0; s < rest; s++)
                EACH_LANE side[s][i] = value < 2 ? slot[value * rest + s][i]
                                                 : slot[s][i] - slot[rest + s][i];
            REDUCE(side, rest, PLUS)
            EACH_LANE half[p][value][i] = side[0][i];
        }
        for (int s = 0; s < rest; s++)
            EACH_LANE slot[s][i] = slot[s][i] + slot[rest + s][i];
    }
}
#undef PLUS
#undef REDUCE

static void F(boxes_max_log)(const struct pdm_plan *plan, struct F(block) *b)
{
    real metric[2][PDM_MAX_LEVELS][LANES], slot[PDM_MAX_LEVELS][LANES];
    real half[2][PDM_MAX_PATTERNS][2][LANES], all[3][LANES], best[PDM_MAX_BITS][2][LANES];
    F(grid_metrics)(plan, b, metric);
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE best[k][0][i] = best[k][1][i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        F(constant_cost)(plan, box, b, all[2]);
        for (int axis = 0; axis < 2; axis++) {
            F(slot_metrics)(plan, box, axis, b, metric[axis], slot);
            F(halve_least)(box->axis[axis].patterns, slot, half[axis]);
            EACH_LANE all[axis][i] = slot[0][i];
        }
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            if (bit.axis == 2) {
                real *m = best[k][bit.invert];
                EACH_LANE m[i] = F(least)(m[i], all[0][i] + all[1][i] + all[2][i]);
            } else {
                for (int value = 0; value < 2; value++) {
                    real *m = best[k][value];
                    const real *h = half[bit.axis][bit.pattern][value ^ bit.invert];
                    const real *other = all[1 - bit.axis];
                    EACH_LANE m[i] = F(least)(m[i], h[i] + other[i] + all[2][i]);
                }
            }
        }
    }
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE b->llr[k][i] = best[k][1][i] - best[k][0][i];
}

/* ln of the sum of the weights of all points with bit k = value, as -least +
 * ln(sum), the sum relative to the nearest such point: no weight that matters
 * underflows, however far the points are.  Terms that cannot change the
 * rounded result count as 0, which lets whole levels be skipped. */
static void F(boxes_bit)(const struct pdm_plan *plan, const struct F(block) *b,
                         real metric[2][PDM_MAX_LEVELS][LANES], int k, int value,
                         real least[LANES], real sum[LANES])
{
    real near[PDM_MAX_BOXES][2][LANES], cost[LANES], slot[PDM_MAX_LEVELS][LANES];
    EACH_LANE least[i] = LARGEST;
    EACH_LANE sum[i] = 0;
    for (int pass = 0; pass < 2; pass++)
        for (int x = 0; x < plan->boxes; x++) {
            const struct pdm_box *box = &plan->box[x];
            const struct pdm_bit bit = box->bit[k];
            real axis_sum[2][LANES];
            if (bit.axis == 2 && bit.invert != value)
                continue;
            F(constant_cost)(plan, box, b, cost);
            for (int axis = 0; axis < 2; axis++) {
                const int slots = F(slot_metrics)(plan, box, axis, b, metric[axis], slot);
                const int shift = box->axis[axis].patterns - 1 - bit.pattern;
                if (pass == 0)
                    EACH_LANE near[x][axis][i] = LARGEST;
                else
                    EACH_LANE axis_sum[axis][i] = 0;
                for (int s = 0; s < slots; s++) {
                    if (bit.axis == axis && ((s >> shift & 1) ^ bit.invert) != value)
                        continue;
                    if (pass == 0) {
                        EACH_LANE near[x][axis][i] = F(least)(near[x][axis][i], slot[s][i]);
                        continue;
                    }
                    real far[LANES];
                    int any = 0;
                    EACH_LANE far[i] = slot[s][i] - near[x][axis][i];
                    EACH_LANE any |= far[i] < NEGLIGIBLE;
                    if (any)
                        EACH_LANE axis_sum[axis][i] +=
                            far[i] < NEGLIGIBLE ? F(exp_minus)(far[i]) : 0;
                }
            }
            if (pass == 0)
                EACH_LANE least[i] =
                    F(least)(least[i], near[x][0][i] + near[x][1][i] + cost[i]);
            else
                EACH_LANE
                {
                    const real far = near[x][0][i] + near[x][1][i] + cost[i] - least[i];
                    sum[i] += F(exp_minus)(far) * (axis_sum[0][i] * axis_sum[1][i]);
                }
        }
}

static void F(boxes_exact)(const struct pdm_plan *plan, struct F(block) *b)
{
    real metric[2][PDM_MAX_LEVELS][LANES], slot[PDM_MAX_LEVELS][LANES];
    real half[2][PDM_MAX_PATTERNS][3][LANES], all[3][LANES], total[PDM_MAX_BITS][3][LANES];
    real near[PDM_MAX_BOXES][3][LANES], least[LANES];
    F(grid_metrics)(plan, b, metric);

    /* The least metric of each axis of each box, and of all points. */
    EACH_LANE least[i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        for (int axis = 0; axis < 2; axis++) {
            const int slots = F(slot_metrics)(plan, &plan->box[x], axis, b, metric[axis], slot);
            EACH_LANE near[x][axis][i] = slot[0][i];
            for (int s = 1; s < slots; s++)
                EACH_LANE near[x][axis][i] = F(least)(near[x][axis][i], slot[s][i]);
        }
        F(constant_cost)(plan, &plan->box[x], b, near[x][2]);
        EACH_LANE near[x][2][i] = near[x][0][i] + near[x][1][i] + near[x][2][i];
        EACH_LANE least[i] = F(least)(least[i], near[x][2][i]);
    }

    for (int k = 0; k < plan->bits; k++)
        EACH_LANE total[k][0][i] = total[k][1][i] = total[k][2][i] = 0;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        for (int axis = 0; axis < 2; axis++) {
            const int slots = F(slot_metrics)(plan, box, axis, b, metric[axis], slot);
            for (int s = 0; s < slots; s++)
                EACH_LANE slot[s][i] = F(exp_minus)(slot[s][i] - near[x][axis][i]);
            F(halve_sum)(box->axis[axis].patterns, slot, half[axis]);
            EACH_LANE all[axis][i] = slot[0][i];
        }
        if (plan->boxes == 1) {
            /* the other axis and the box's own weight cancel in the ratio */
            EACH_LANE all[0][i] = all[1][i] = 1;
        } else {
            EACH_LANE
            {
                const real weight = F(exp_minus)(near[x][2][i] - least[i]);
                all[0][i] *= weight;
                all[2][i] = all[0][i] * all[1][i];
                all[1][i] *= weight;
            }
        }
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            if (bit.axis == 2) {
                real *t = total[k][bit.invert], *difference = total[k][2];
                EACH_LANE t[i] += all[2][i];
                EACH_LANE difference[i] += bit.invert ? -all[2][i] : all[2][i];
            } else {
                const real *zero = half[bit.axis][bit.pattern][bit.invert];
                const real *one = half[bit.axis][bit.pattern][1 - bit.invert];
                const real *difference = half[bit.axis][bit.pattern][2];
                const real *other = all[1 - bit.axis];
                EACH_LANE total[k][0][i] += zero[i] * other[i];
                EACH_LANE total[k][1][i] += one[i] * other[i];
                EACH_LANE total[k][2][i] +=
                    (bit.invert ? -difference[i] : difference[i]) * other[i];
            }
        }
    }

    for (int k = 0; k < plan->bits; k++) {
        int far = 0;
        EACH_LANE
        {
            /* a sum that underflowed to 0 must not reach the logarithm */
            const real zero = F(most)(total[k][0][i], SMALLEST), one = F(most)(total[k][1][i], SMALLEST);
            b->llr[k][i] = F(log_ratio)(zero, one, total[k][2][i]);
            far |= F(magnitude)(b->llr[k][i]) > LARGEST_RATIO;
        }
        if (!far)
            continue;
        real metric_of[2][LANES], sum[2][LANES];
        for (int value = 0; value < 2; value++)
            F(boxes_bit)(plan, b, metric, k, value, metric_of[value], sum[value]);
        EACH_LANE
        {
            const real l = (metric_of[1][i] - metric_of[0][i]) +
                           F(log_ratio)(sum[0][i], sum[1][i], sum[0][i] - sum[1][i]);
            b->llr[k][i] = F(magnitude)(b->llr[k][i]) > LARGEST_RATIO ? l : b->llr[k][i];
        }
    }
}

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
 * Metrics are -ln of the weights, relative to the box's level nearest to the
 * sample on that axis: a level i spacings from it, which the sample misses by
 * e half-spacings, costs (2 a)^2 / N0 i (i + e).  The difference of two squared
 * distances would lose its digits; so would metrics relative to one level for
 * all boxes where the sample is nearest to a hole of the grid. */

/* One axis of a box, as seen by the samples of a block. */
struct F(view) {
    real number[LANES];         /* the nearest level ... */
    uint32_t slot[LANES];       /* ... and its slot, if it was searched for */
    real e[LANES];              /* from there to the sample, in half-spacings */
    real scale[LANES];          /* (2 a)^2 / N0 */
};

/* Metric of a level relative to the nearest one. */
static inline real F(level_metric)(const struct F(view) *view, int i, real number)
{
    const real spacings = view->number[i] - number;
    const real m = view->scale[i] * (spacings * (spacings + view->e[i]));
    return F(most)(F(least)(m, LARGEST), -LARGEST);
}

/* Sets e and scale once number is known.  The half-spacing is taken in two
 * parts, of which the first has so few digits that its multiples are exact: e
 * then has no rounding error of the level's size, and is exactly 1 half way
 * between levels -1 and 1, where a factor 1 / a would leave a rounding error. */
static inline void F(set_view)(const struct pdm_plan *plan, int axis, const struct F(block) *b,
                               struct F(view) *view)
{
    const real a = (real)plan->half_spacing[axis], centre = (real)plan->centre[axis];
    const real a_high = (a + a * SPLIT) - a * SPLIT;
    const real a_low = (real)(plan->half_spacing[axis] - (double)a_high);
    const real last = (real)(plan->levels[axis] - 1);
    EACH_LANE
    {
        const real level = view->number[i] + view->number[i] - last;
        view->e[i] = ((b->v[axis][i] - centre - level * a_high) - level * a_low) / a;
        view->scale[i] = F(over_noise)(plan->spacing_squared[axis], b->noise[i]);
    }
}

/* Where the sample is on the axis, in spacings from level 0, held to the grid;
 * whole: the nearest level. */
static inline void F(place)(const struct pdm_plan *plan, int axis, const struct F(block) *b, int whole,
                            real place[LANES])
{
    const real centre = (real)plan->centre[axis], last = (real)(plan->levels[axis] - 1);
    const real per_spacing = (real)(0.5 / plan->half_spacing[axis]);
    EACH_LANE
    {
        const real x = (b->v[axis][i] - centre) * per_spacing + last * R(0.5);
        const real held = F(most)(F(least)(x, last), 0);
        place[i] = whole ? (held + MAGIC) - MAGIC : held;
    }
}

/* View of a box's axis whose levels need not be all of the grid's: the nearest
 * one is searched for. */
static void F(search_view)(const struct pdm_plan *plan, const struct pdm_box *box, int axis,
                           const struct F(block) *b, struct F(view) *view)
{
    const struct pdm_level *level = pdm_levels(plan, box, axis);
    real place[LANES], best[LANES];
    F(place)(plan, axis, b, 0, place);
    EACH_LANE best[i] = LARGEST;
    for (int j = 0; j < box->axis[axis].count; j++) {
        const real number = (real)level[j].number;
        const uint32_t slot = level[j].slot;
        EACH_LANE
        {
            const real way = F(magnitude)(place[i] - number);
            view->number[i] = way < best[i] ? number : view->number[i];
            view->slot[i] = way < best[i] ? slot : view->slot[i];
            best[i] = F(least)(way, best[i]);
        }
    }
    F(set_view)(plan, axis, b, view);
}

/* Views of all boxes, and how much farther each box's nearest point is than
 * the nearest point of all. */
static void F(view_boxes)(const struct pdm_plan *plan, const struct F(block) *b,
                          struct F(view) view[PDM_MAX_BOXES][2], real farther[PDM_MAX_BOXES][LANES])
{
    if (plan->boxes == 1) {
        for (int axis = 0; axis < 2; axis++) {
            F(place)(plan, axis, b, 1, view[0][axis].number);
            F(set_view)(plan, axis, b, &view[0][axis]);
        }
        EACH_LANE farther[0][i] = 0;
        return;
    }
    real least[LANES];
    struct F(view) grid[2];
    for (int axis = 0; axis < 2; axis++) {
        F(place)(plan, axis, b, 1, grid[axis].number);
        F(set_view)(plan, axis, b, &grid[axis]);
    }
    EACH_LANE least[i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        for (int axis = 0; axis < 2; axis++)
            F(search_view)(plan, &plan->box[x], axis, b, &view[x][axis]);
        EACH_LANE
        {
            farther[x][i] = F(level_metric)(&grid[0], i, view[x][0].number[i]) +
                            F(level_metric)(&grid[1], i, view[x][1].number[i]);
            farther[x][i] = F(least)(farther[x][i], LARGEST);
            least[i] = F(least)(least[i], farther[x][i]);
        }
    }
    for (int x = 0; x < plan->boxes; x++)
        EACH_LANE farther[x][i] -= least[i];
}

/* Metrics by slot for one axis of a box, the prior of the axis's bits added;
 * a slot without a level gets the largest metric.  Returns the slots. */
static inline int F(slot_metrics)(const struct pdm_plan *plan, const struct pdm_box *box, int axis,
                                  const struct F(block) *b, const struct F(view) *view,
                                  real slot[PDM_MAX_LEVELS][LANES])
{
    const struct pdm_level *level = pdm_levels(plan, box, axis);
    const int patterns = box->axis[axis].patterns, slots = 1 << patterns;
    const int count = box->axis[axis].count;
    if (count < slots)
        for (int s = 0; s < slots; s++)
            EACH_LANE slot[s][i] = LARGEST;
    for (int j = 0; j < count; j++) {
        const real number = (real)level[j].number;
        real *metric = slot[level[j].slot];
        EACH_LANE metric[i] = F(level_metric)(view, i, number);
    }
    if (!b->has_prior)
        return slots;
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
    for (int s = 0; s < slots; s++)
        for (int p = 0; p < patterns; p++)
            EACH_LANE slot[s][i] =
                F(least)(slot[s][i] + cost[p][s >> (patterns - 1 - p) & 1][i], LARGEST);
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

/* Halve the slots until one is left: half[p][value] becomes the sum (the
 * minimum) over the slots whose pattern p has that value, slot[0] that over
 * all.  The slots are overwritten. */
#define DEFINE_HALVE(name, combine)                                                             \
    static inline void F(name)(int patterns, real slot[PDM_MAX_LEVELS][LANES],                  \
                               real half[PDM_MAX_PATTERNS][2][LANES])                           \
    {                                                                                           \
        real side[PDM_MAX_LEVELS / 2][LANES];                                                   \
        for (int p = 0; p < patterns; p++) {                                                    \
            const int rest = 1 << (patterns - 1 - p);                                           \
            for (int value = 0; value < 2; value++) {                                           \
                for (int s = 0; s < rest; s++)                                                  \
                    EACH_LANE side[s][i] = slot[value * rest + s][i];                           \
                REDUCE(side, rest, combine)                                                     \
                EACH_LANE half[p][value][i] = side[0][i];                                       \
            }                                                                                   \
            for (int s = 0; s < rest; s++)                                                      \
                EACH_LANE slot[s][i] = combine(slot[s][i], slot[rest + s][i]);                  \
        }                                                                                       \
    }
DEFINE_HALVE(halve_sum, PLUS)
DEFINE_HALVE(halve_least, F(least))

/* difference[p]: the sum of the slots whose pattern p is 0 less that of the
 * others, added up from the differences of slots that differ in this pattern
 * alone: it keeps its digits where the two sums are nearly equal, as at low
 * Es/N0, and each is only known to within its own rounding. */
static inline void F(differences)(int patterns, real slot[PDM_MAX_LEVELS][LANES],
                                  real difference[PDM_MAX_PATTERNS][LANES])
{
    real side[PDM_MAX_LEVELS / 2][LANES];
    for (int p = 0; p < patterns; p++) {
        const int way = 1 << (patterns - 1 - p), pairs = 1 << (patterns - 1);
        for (int s = 0; s < pairs; s++) {
            const int zero = (s & ~(way - 1)) << 1 | (s & (way - 1));
            EACH_LANE side[s][i] = slot[zero][i] - slot[zero + way][i];
        }
        REDUCE(side, pairs, PLUS)
        EACH_LANE difference[p][i] = side[0][i];
    }
}
#undef PLUS
#undef REDUCE
#undef DEFINE_HALVE

static void F(boxes_max_log)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(view) view[PDM_MAX_BOXES][2];
    real farther[PDM_MAX_BOXES][LANES], cost[LANES], slot[PDM_MAX_LEVELS][LANES];
    real half[2][PDM_MAX_PATTERNS][2][LANES], all[2][LANES], best[PDM_MAX_BITS][2][LANES];
    F(view_boxes)(plan, b, view, farther);
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE best[k][0][i] = best[k][1][i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        F(constant_cost)(plan, box, b, cost);
        EACH_LANE cost[i] += farther[x][i];
        for (int axis = 0; axis < 2; axis++) {
            F(slot_metrics)(plan, box, axis, b, &view[x][axis], slot);
            F(halve_least)(box->axis[axis].patterns, slot, half[axis]);
            EACH_LANE all[axis][i] = slot[0][i];
        }
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            if (bit.axis == 2) {
                real *m = best[k][bit.invert];
                EACH_LANE m[i] = F(least)(m[i], all[0][i] + all[1][i] + cost[i]);
            } else {
                for (int value = 0; value < 2; value++) {
                    real *m = best[k][value];
                    const real *h = half[bit.axis][bit.pattern][value ^ bit.invert];
                    const real *other = all[1 - bit.axis];
                    EACH_LANE m[i] = F(least)(m[i], h[i] + other[i] + cost[i]);
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
                         struct F(view) view[PDM_MAX_BOXES][2],
                         real farther[PDM_MAX_BOXES][LANES], int k, int value, real least[LANES],
                         real sum[LANES])
{
    real near[PDM_MAX_BOXES][3][LANES], slot[PDM_MAX_LEVELS][LANES];
    EACH_LANE least[i] = LARGEST;
    EACH_LANE sum[i] = 0;
    for (int pass = 0; pass < 2; pass++)
        for (int x = 0; x < plan->boxes; x++) {
            const struct pdm_box *box = &plan->box[x];
            const struct pdm_bit bit = box->bit[k];
            real axis_sum[2][LANES];
            if (bit.axis == 2 && bit.invert != value)
                continue;
            for (int axis = 0; axis < 2; axis++) {
                const int slots = F(slot_metrics)(plan, box, axis, b, &view[x][axis], slot);
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
                    real way[LANES];
                    int any = 0;
                    EACH_LANE way[i] = slot[s][i] - near[x][axis][i];
                    EACH_LANE any |= way[i] < NEGLIGIBLE;
                    if (any)
                        EACH_LANE axis_sum[axis][i] +=
                            way[i] < NEGLIGIBLE ? F(exp_minus)(way[i]) : 0;
                }
            }
            if (pass == 0) {
                F(constant_cost)(plan, box, b, near[x][2]);
                EACH_LANE near[x][2][i] =
                    near[x][0][i] + near[x][1][i] + (near[x][2][i] + farther[x][i]);
                EACH_LANE least[i] = F(least)(least[i], near[x][2][i]);
            } else {
                EACH_LANE sum[i] += F(exp_minus)(near[x][2][i] - least[i]) *
                                    (axis_sum[0][i] * axis_sum[1][i]);
            }
        }
}

static void F(boxes_exact)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(view) view[PDM_MAX_BOXES][2];
    real farther[PDM_MAX_BOXES][LANES], slot[PDM_MAX_LEVELS][LANES];
    real half[2][PDM_MAX_PATTERNS][2][LANES], difference[2][PDM_MAX_PATTERNS][LANES];
    real all[3][LANES], total[PDM_MAX_BITS][3][LANES];
    real near[PDM_MAX_BOXES][3][LANES], least[LANES];
    F(view_boxes)(plan, b, view, farther);

    /* The least metric of each axis of each box, and of all points: 0 but for
     * the prior. */
    EACH_LANE least[i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        for (int axis = 0; axis < 2; axis++) {
            EACH_LANE near[x][axis][i] = 0;
            if (b->has_prior) {
                const int slots =
                    F(slot_metrics)(plan, &plan->box[x], axis, b, &view[x][axis], slot);
                EACH_LANE near[x][axis][i] = slot[0][i];
                for (int s = 1; s < slots; s++)
                    EACH_LANE near[x][axis][i] = F(least)(near[x][axis][i], slot[s][i]);
            }
        }
        F(constant_cost)(plan, &plan->box[x], b, near[x][2]);
        EACH_LANE near[x][2][i] = near[x][0][i] + near[x][1][i] + (near[x][2][i] + farther[x][i]);
        EACH_LANE least[i] = F(least)(least[i], near[x][2][i]);
    }

    for (int k = 0; k < plan->bits; k++)
        EACH_LANE total[k][0][i] = total[k][1][i] = total[k][2][i] = 0;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        for (int axis = 0; axis < 2; axis++) {
            const int slots = F(slot_metrics)(plan, box, axis, b, &view[x][axis], slot);
            for (int s = 0; s < slots; s++)
                EACH_LANE slot[s][i] = F(exp_minus)(slot[s][i] - near[x][axis][i]);
            F(differences)(box->axis[axis].patterns, slot, difference[axis]);
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
                real *t = total[k][bit.invert];
                EACH_LANE t[i] += all[2][i];
                EACH_LANE total[k][2][i] += bit.invert ? -all[2][i] : all[2][i];
            } else {
                const real *zero = half[bit.axis][bit.pattern][bit.invert];
                const real *one = half[bit.axis][bit.pattern][1 - bit.invert];
                const real *d = difference[bit.axis][bit.pattern];
                const real *other = all[1 - bit.axis];
                EACH_LANE total[k][0][i] += zero[i] * other[i];
                EACH_LANE total[k][1][i] += one[i] * other[i];
                EACH_LANE total[k][2][i] += (bit.invert ? -d[i] : d[i]) * other[i];
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
            F(boxes_bit)(plan, b, view, farther, k, value, metric_of[value], sum[value]);
        EACH_LANE
        {
            const real l = (metric_of[1][i] - metric_of[0][i]) +
                           F(log_ratio)(sum[0][i], sum[1][i], sum[0][i] - sum[1][i]);
            b->llr[k][i] = F(magnitude)(b->llr[k][i]) > LARGEST_RATIO ? l : b->llr[k][i];
        }
    }
}

static void F(boxes_slice)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(view) view[PDM_MAX_BOXES][2];
    real farther[PDM_MAX_BOXES][LANES];
    F(view_boxes)(plan, b, view, farther);
    EACH_LANE b->label[i] = 0;
    for (int x = plan->boxes - 1; x >= 0; x--) {
        const struct pdm_box *box = &plan->box[x];
        uint32_t candidate[LANES];
        if (plan->boxes == 1)
            for (int axis = 0; axis < 2; axis++)
                F(search_view)(plan, box, axis, b, &view[x][axis]);
        EACH_LANE candidate[i] = 0;
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            const int shift = bit.axis == 2 ? 0 : box->axis[bit.axis].patterns - 1 - bit.pattern;
            const uint32_t *slot = view[x][bit.axis & 1].slot;
            const uint32_t mask = bit.axis < 2, invert = bit.invert;
            EACH_LANE candidate[i] = candidate[i] << 1 | ((slot[i] >> shift & mask) ^ invert);
        }
        EACH_LANE b->label[i] = farther[x][i] == 0 ? candidate[i] : b->label[i];
    }
}

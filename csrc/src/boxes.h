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
 * Metrics are -ln (or -log2) of the weights, relative to the box's level nearest to the
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
    real scale_low[LANES], scaled_e_low[LANES]; /* what rounding took off scale and e */
};

/* All boxes.  Metrics are in units of 1 / per_nat: in nats for max-log; as
 * exponents of 2 for sums, so that they go into split_exp2 unrounded. */
struct F(scene) {
    struct F(view) view[PDM_MAX_BOXES][2];
    real farther[PDM_MAX_BOXES][LANES];     /* the box's nearest point than that of all ... */
    real farther_low[PDM_MAX_BOXES][LANES]; /* ... and what its rounding took off */
    double per_nat;
};

/* Metric of a level relative to the nearest one, for scale 1. */
static inline real F(level_distance)(const struct F(view) *view, int i, real number)
{
    const real spacings = view->number[i] - number;
    return spacings * (spacings + view->e[i]);
}

/* What the roundings of e and scale took off scale x distance.  e matters where
 * level and sample are far from the nearest level on the same side of it, as
 * across a hole of the grid: spacings and e cancel there. */
static inline real F(level_low)(const struct F(view) *view, int i, real number, real distance)
{
    const real spacings = view->number[i] - number;
    return view->scale_low[i] * distance + view->scaled_e_low[i] * spacings;
}

/* Sets e and scale once number is known, both in two parts.  The half-spacing
 * is split so that multiples of its first part are exact: e then has no
 * rounding error of the level's size, and is a whole number where the sample
 * is a whole number of half-spacings away. */
static inline void F(set_view)(const struct pdm_plan *plan, int axis, const struct F(block) *b,
                               double per_nat, struct F(view) *view)
{
    const double a = plan->half_spacing[axis], centre = plan->centre[axis];
    const double a_high = (a + a * 512) - a * 512, a_low = a - a_high;  /* 9 bits fewer */
    const double last = plan->levels[axis] - 1;
    const double square = plan->spacing_squared[axis], square_low = plan->spacing_squared_low[axis];
    const double units = square * per_nat;
    const double units_low = product_low(square, per_nat) + square_low * per_nat +
                             (per_nat == 1 ? 0 : square * LOG2_E_LOW);
    EACH_LANE
    {
        const double level = 2 * (double)view->number[i] - last;
        const double v = (double)b->v[axis][i] - centre, l = level * a_high;
        const double way = v - l, part = way - v;
        const double way_low = ((v - (way - part)) - (l + part)) - level * a_low;
        const double e = (way + way_low) / a;
        const double e_low = ((way - e * a) - product_low(e, a) + way_low) / a;
        /* far off, where Dekker's product overflows, it does not matter */
        const double low = (e - (double)(real)e) + (e > -0x1p+80 && e < 0x1p+80 ? e_low : 0);
        view->e[i] = (real)e;
        view->scaled_e_low[i] = (real)low;
    }
    F(scale)(b, units, view->scale);
    for (int i = 0; i < (b->same_noise ? 1 : LANES); i++) {
        const double noise = b->noise[i], scale = (double)view->scale[i];
        const double rest = (units - scale * noise) - product_low(scale, noise) + units_low;
        view->scale_low[i] = noise > 0x1p-80 && noise < 0x1p+80 ? (real)(rest / noise) : 0;
    }
    if (b->same_noise)
        EACH_LANE view->scale_low[i] = view->scale_low[0];
    EACH_LANE view->scaled_e_low[i] *= view->scale[i];
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
                           const struct F(block) *b, double per_nat, struct F(view) *view)
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
    F(set_view)(plan, axis, b, per_nat, view);
}

static void F(view_boxes)(const struct pdm_plan *plan, const struct F(block) *b, double per_nat,
                          struct F(scene) *scene)
{
    scene->per_nat = per_nat;
    if (plan->boxes == 1 && plan->box[0].axis[0].count == plan->levels[0] &&
        plan->box[0].axis[1].count == plan->levels[1]) {     /* no lines left out */
        for (int axis = 0; axis < 2; axis++) {
            F(place)(plan, axis, b, 1, scene->view[0][axis].number);
            F(set_view)(plan, axis, b, per_nat, &scene->view[0][axis]);
        }
        EACH_LANE scene->farther[0][i] = scene->farther_low[0][i] = 0;
        return;
    }
    double far[PDM_MAX_BOXES][LANES], low[PDM_MAX_BOXES][LANES], least[LANES];
    struct F(view) grid[2];
    for (int axis = 0; axis < 2; axis++) {
        F(place)(plan, axis, b, 1, grid[axis].number);
        F(set_view)(plan, axis, b, per_nat, &grid[axis]);
    }
    EACH_LANE least[i] = (double)LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        EACH_LANE far[x][i] = low[x][i] = 0;
        for (int axis = 0; axis < 2; axis++) {
            F(search_view)(plan, &plan->box[x], axis, b, per_nat, &scene->view[x][axis]);
            /* A whole box hangs on this one number, so it is formed in two parts. */
            EACH_LANE
            {
                const double spacings =
                    (double)grid[axis].number[i] - (double)scene->view[x][axis].number[i];
                const double distance = spacings * (spacings + (double)grid[axis].e[i]);
                const double scale = (double)grid[axis].scale[i], m = scale * distance;
                const double sum = far[x][i] + m, part = sum - far[x][i];
                low[x][i] += ((far[x][i] - (sum - part)) + (m - part)) +
                             (m < 0x1p+900 ? product_low(scale, distance) : 0) +
                             (double)grid[axis].scale_low[i] * distance +
                             (double)grid[axis].scaled_e_low[i] * spacings;
                far[x][i] = sum < (double)LARGEST ? sum : (double)LARGEST;
            }
        }
        EACH_LANE least[i] = least[i] < far[x][i] ? least[i] : far[x][i];
    }
    for (int x = 0; x < plan->boxes; x++)
        EACH_LANE
        {
            const double way = far[x][i] - least[i];
            scene->farther[x][i] = (real)way;
            scene->farther_low[x][i] =
                way > 0 && way < 0x1p+100 ? (real)((way - (double)(real)way) + low[x][i]) : 0;
        }
}

/* Metrics by slot for one axis of box x, the prior of the axis's bits added; a
 * slot without a level gets the largest metric.  Returns the slots. */
static inline int F(slot_metrics)(const struct pdm_plan *plan, int x, int axis,
                                  const struct F(block) *b, const struct F(scene) *scene,
                                  real slot[][LANES])
{
    const struct pdm_box *box = &plan->box[x];
    const struct F(view) *view = &scene->view[x][axis];
    const real unit = (real)scene->per_nat;
    const struct pdm_level *level = pdm_levels(plan, box, axis);
    const int patterns = box->axis[axis].patterns, slots = 1 << patterns;
    const int count = box->axis[axis].count;
    if (count < slots)
        for (int s = 0; s < slots; s++)
            EACH_LANE slot[s][i] = LARGEST;
    for (int j = 0; j < count; j++) {
        const real number = (real)level[j].number;
        real *metric = slot[level[j].slot];
        EACH_LANE metric[i] = view->scale[i] * F(level_distance)(view, i, number);
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
                cost[bit.pattern][bit.invert][i] += F(most)(-b->prior[k][i], 0) * unit;
                cost[bit.pattern][1 - bit.invert][i] += F(most)(b->prior[k][i], 0) * unit;
            }
    }
    for (int s = 0; s < slots; s++)
        for (int p = 0; p < patterns; p++)
            EACH_LANE slot[s][i] =
                F(least)(slot[s][i] + cost[p][s >> (patterns - 1 - p) & 1][i], LARGEST);
    return slots;
}

/* Weights by slot, relative to the metric near[]: power 2^-n. */
static inline void F(slot_weights)(const struct pdm_plan *plan, int x, int axis,
                                   const struct F(block) *b, const struct F(scene) *scene,
                                   const real near[LANES], real power[][LANES], real n[][LANES])
{
    const struct pdm_box *box = &plan->box[x];
    const struct pdm_level *level = pdm_levels(plan, box, axis);
    const struct F(view) *view = &scene->view[x][axis];
    const int slots = 1 << box->axis[axis].patterns, count = box->axis[axis].count;
    if (b->has_prior) {
        F(slot_metrics)(plan, x, axis, b, scene, n);
        for (int s = 0; s < slots; s++)
            EACH_LANE power[s][i] = F(split_exp2)(n[s][i] - near[i], 0, &n[s][i]);
        return;
    }
    if (count < slots)
        for (int s = 0; s < slots; s++)
            EACH_LANE
            {
                power[s][i] = 0;
                n[s][i] = LARGEST;
            }
    for (int j = 0; j < count; j++) {
        const real number = (real)level[j].number;
        const unsigned s = level[j].slot;
        EACH_LANE
        {
            const real distance = F(level_distance)(view, i, number);
            power[s][i] = F(split_exp2)(view->scale[i] * distance,
                                        F(level_low)(view, i, number, distance), &n[s][i]);
        }
    }
}

/* What all points of box x cost: the way to it, and the prior of bits that are
 * the same all over it. */
static inline void F(box_cost)(const struct pdm_plan *plan, int x, const struct F(block) *b,
                               const struct F(scene) *scene, real cost[LANES])
{
    const real unit = (real)scene->per_nat;
    EACH_LANE cost[i] = scene->farther[x][i];
    if (b->has_prior)
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = plan->box[x].bit[k];
            if (bit.axis == 2)
                EACH_LANE cost[i] +=
                    F(most)(bit.invert ? b->prior[k][i] : -b->prior[k][i], 0) * unit;
        }
}

/* result = all of count terms (a power of two), combined in pairs; term(s)
 * is the array of the s-th. */
#define REDUCE(result, count, term, combine)                                                    \
    do {                                                                                        \
        const int first_step = (count) / 2;                                                     \
        if (first_step == 0)                                                                    \
            EACH_LANE result[i] = term(0);                                                      \
        for (int s = 0; s < first_step; s++)                                                    \
            EACH_LANE side[s][i] = combine(term(s), term(s + first_step));                      \
        for (int step = first_step / 2; step > 0; step /= 2)                                    \
            for (int s = 0; s < step; s++)                                                      \
                EACH_LANE side[s][i] = combine(side[s][i], side[s + step][i]);                  \
        if (first_step > 0)                                                                     \
            EACH_LANE result[i] = side[0][i];                                                   \
    } while (0)
#define PLUS(a, b) ((a) + (b))

/* Halve the slots until one is left: half[p][value] becomes the sum (the
 * minimum) over the slots whose pattern p has that value, slot[0] that over
 * all.  The slots are overwritten. */
#define DEFINE_HALVE(name, combine)                                                             \
    static inline void F(name)(int patterns, real slot[][LANES],                                \
                               real half[PDM_MAX_PATTERNS][2][LANES])                           \
    {                                                                                           \
        real side[MAX_HALF][LANES];                                                             \
        for (int p = 0; p < patterns; p++) {                                                    \
            const int rest = 1 << (patterns - 1 - p);                                           \
            REDUCE(half[p][0], rest, ZERO_SIDE, combine);                                       \
            REDUCE(half[p][1], rest, ONE_SIDE, combine);                                        \
            for (int s = 0; s < rest; s++)                                                      \
                EACH_LANE slot[s][i] = combine(slot[s][i], slot[rest + s][i]);                  \
        }                                                                                       \
    }
#define ZERO_SIDE(s) slot[s][i]
#define ONE_SIDE(s) slot[rest + (s)][i]
DEFINE_HALVE(halve_sum, PLUS)
DEFINE_HALVE(halve_least, F(least))
#undef ZERO_SIDE
#undef ONE_SIDE

/* difference[p]: the sum of the slots whose pattern p is 0 less that of the
 * others, added up from the differences of slots that differ in this pattern
 * alone: it keeps its digits where the two sums are nearly equal, as at low
 * Es/N0, and each is only known to within its own rounding. */
static inline void F(differences)(int patterns, real slot[][LANES],
                                  real difference[PDM_MAX_PATTERNS][LANES])
{
    real side[MAX_HALF][LANES];
    for (int p = 0; p < patterns; p++) {
        const int way = 1 << (patterns - 1 - p);
#define ZERO_OF(s) (((s) & ~(way - 1)) << 1 | ((s) & (way - 1)))
#define PAIR(s) (slot[ZERO_OF(s)][i] - slot[ZERO_OF(s) + way][i])
        REDUCE(difference[p], 1 << (patterns - 1), PAIR, PLUS);
#undef PAIR
#undef ZERO_OF
    }
}
#undef PLUS
#undef REDUCE
#undef DEFINE_HALVE

APART void F(boxes_max_log)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(scene) scene;
    real cost[LANES], slot[PDM_MAX_LEVELS][LANES];
    real half[2][PDM_MAX_PATTERNS][2][LANES], all[2][LANES], best[PDM_MAX_BITS][2][LANES];
    F(view_boxes)(plan, b, 1, &scene);
    for (int k = 0; k < plan->bits; k++)
        EACH_LANE best[k][0][i] = best[k][1][i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        F(box_cost)(plan, x, b, &scene, cost);
        for (int axis = 0; axis < 2; axis++) {
            F(slot_metrics)(plan, x, axis, b, &scene, slot);
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

/* All that the sums of a bit are made of. */
struct F(parts) {
    real slot_power[PDM_MAX_SLOTS][LANES], slot_n[PDM_MAX_SLOTS][LANES];
    real all[PDM_MAX_BOXES][2][LANES];                  /* sum of an axis */
    real power[PDM_MAX_BOXES][LANES], n[PDM_MAX_BOXES][LANES];  /* weight of a box */
};

/* Sum over all points with bit k = value, as sum 2^-n with n that of the
 * heaviest of them: none that matters underflows, however far they are. */
static void F(far_sum)(const struct pdm_plan *plan, const struct F(parts) *parts, int k, int value,
                       real sum[LANES], real n[LANES])
{
    EACH_LANE n[i] = LARGEST;
    EACH_LANE sum[i] = 0;
    for (int pass = 0; pass < 2; pass++)
        for (int x = 0; x < plan->boxes; x++) {
            const struct pdm_bit bit = plan->box[x].bit[k];
            const real *n_box = parts->n[x], *power = parts->power[x];
            if (bit.axis == 2) {
                const real *all = parts->all[x][0], *other = parts->all[x][1];
                if (bit.invert == value && pass == 0)
                    EACH_LANE n[i] = F(least)(n[i], n_box[i]);
                else if (bit.invert == value)
                    EACH_LANE sum[i] += power[i] * (all[i] * other[i]) * F(half_to_the)(n_box[i] - n[i]);
                continue;
            }
            const int first = plan->box[x].axis[bit.axis].first_slot;
            const real *other = parts->all[x][1 - bit.axis];
            const int patterns = plan->box[x].axis[bit.axis].patterns;
            const int shift = patterns - 1 - bit.pattern;
            real axis_sum[LANES];
            EACH_LANE axis_sum[i] = 0;
            for (int s = 0; s < 1 << patterns; s++) {
                const real *slot_n = parts->slot_n[first + s], *slot_power = parts->slot_power[first + s];
                if (((s >> shift & 1) ^ bit.invert) != value)
                    continue;
                if (pass == 0)
                    EACH_LANE n[i] = F(least)(n[i], slot_n[i] + n_box[i]);
                else
                    EACH_LANE axis_sum[i] += slot_power[i] * F(half_to_the)(slot_n[i] + n_box[i] - n[i]);
            }
            if (pass == 1)
                EACH_LANE sum[i] += axis_sum[i] * (power[i] * other[i]);
        }
}

APART void F(boxes_exact)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(scene) scene;
    struct F(parts) parts;
    real slot[PDM_MAX_LEVELS][LANES], near[PDM_MAX_BOXES][3][LANES], least[LANES];
    real half[2][PDM_MAX_PATTERNS][2][LANES], difference[2][PDM_MAX_PATTERNS][LANES];
    real total[PDM_MAX_BITS][3][LANES];
    F(view_boxes)(plan, b, LOG2_E, &scene);

    /* The least metric of each axis of each box, and of all points: 0 but for
     * the prior (and for roundings of the nearest level, which split_exp2 takes). */
    EACH_LANE least[i] = LARGEST;
    for (int x = 0; x < plan->boxes; x++) {
        for (int axis = 0; axis < 2; axis++) {
            EACH_LANE near[x][axis][i] = 0;
            if (b->has_prior) {
                const int slots = F(slot_metrics)(plan, x, axis, b, &scene, slot);
                EACH_LANE near[x][axis][i] = slot[0][i];
                for (int s = 1; s < slots; s++)
                    EACH_LANE near[x][axis][i] = F(least)(near[x][axis][i], slot[s][i]);
            }
        }
        F(box_cost)(plan, x, b, &scene, near[x][2]);
        EACH_LANE near[x][2][i] += near[x][0][i] + near[x][1][i];
        EACH_LANE least[i] = F(least)(least[i], near[x][2][i]);
    }

    for (int k = 0; k < plan->bits; k++)
        EACH_LANE total[k][0][i] = total[k][1][i] = total[k][2][i] = 0;
    for (int x = 0; x < plan->boxes; x++) {
        const struct pdm_box *box = &plan->box[x];
        for (int axis = 0; axis < 2; axis++) {
            const int patterns = box->axis[axis].patterns, first = box->axis[axis].first_slot;
            real(*power)[LANES] = parts.slot_power + first, (*n)[LANES] = parts.slot_n + first;
            F(slot_weights)(plan, x, axis, b, &scene, near[x][axis], power, n);
            for (int s = 0; s < 1 << patterns; s++)
                EACH_LANE slot[s][i] = power[s][i] * F(half_to_the)(n[s][i]);
            F(differences)(patterns, slot, difference[axis]);
            F(halve_sum)(patterns, slot, half[axis]);
            EACH_LANE parts.all[x][axis][i] = slot[0][i];
        }
        real share[3][LANES];   /* what a sum over one axis is multiplied with; both */
        if (plan->boxes == 1) {
            /* the other axis and the box's own weight cancel in the ratio */
            for (int axis = 0; axis < 2; axis++)
                EACH_LANE parts.all[x][axis][i] = share[axis][i] = 1;
            EACH_LANE parts.power[x][i] = 1;
            EACH_LANE parts.n[x][i] = 0;
        } else {
            EACH_LANE
            {
                parts.power[x][i] = F(split_exp2)(near[x][2][i] - least[i], scene.farther_low[x][i],
                                                  &parts.n[x][i]);
                const real weight = parts.power[x][i] * F(half_to_the)(parts.n[x][i]);
                share[0][i] = parts.all[x][1][i] * weight;
                share[1][i] = parts.all[x][0][i] * weight;
                share[2][i] = parts.all[x][0][i] * share[0][i];
            }
        }
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            const real *with = share[bit.axis];
            if (bit.axis == 2) {
                real *t = total[k][bit.invert];
                EACH_LANE t[i] += with[i];
                EACH_LANE total[k][2][i] += bit.invert ? -with[i] : with[i];
            } else {
                const real *zero = half[bit.axis][bit.pattern][bit.invert];
                const real *one = half[bit.axis][bit.pattern][1 - bit.invert];
                const real *d = difference[bit.axis][bit.pattern];
                EACH_LANE total[k][0][i] += zero[i] * with[i];
                EACH_LANE total[k][1][i] += one[i] * with[i];
                EACH_LANE total[k][2][i] += (bit.invert ? -d[i] : d[i]) * with[i];
            }
        }
    }

    for (int k = 0; k < plan->bits; k++) {
        int far = 0;
        real *llr = b->llr[k];
        EACH_LANE
        {
            /* a sum that underflowed to 0 must not reach the logarithm */
            const real zero = F(most)(total[k][0][i], SMALLEST), one = F(most)(total[k][1][i], SMALLEST);
            llr[i] = F(log_ratio)(zero, one, total[k][2][i]);
        }
        EACH_LANE far |= F(magnitude)(llr[i]) > LARGEST_RATIO;
        if (!far)
            continue;
        real sum[2][LANES], n[2][LANES];
        for (int value = 0; value < 2; value++)
            F(far_sum)(plan, &parts, k, value, sum[value], n[value]);
        EACH_LANE
        {
            const real l = F(log_ratio)(sum[0][i], sum[1][i], sum[0][i] - sum[1][i]);
            const real whole = F(add_ln2)(n[1][i] - n[0][i], l);
            llr[i] = F(magnitude)(llr[i]) > LARGEST_RATIO ? whole : llr[i];
        }
    }
}

APART void F(boxes_slice)(const struct pdm_plan *plan, struct F(block) *b)
{
    struct F(scene) scene;
    F(view_boxes)(plan, b, 1, &scene);
    EACH_LANE b->label[i] = 0;
    for (int x = plan->boxes - 1; x >= 0; x--) {
        const struct pdm_box *box = &plan->box[x];
        uint32_t candidate[LANES];
        if (plan->boxes == 1)
            for (int axis = 0; axis < 2; axis++)
                F(search_view)(plan, box, axis, b, 1, &scene.view[x][axis]);
        EACH_LANE candidate[i] = 0;
        for (int k = 0; k < plan->bits; k++) {
            const struct pdm_bit bit = box->bit[k];
            const int shift = bit.axis == 2 ? 0 : box->axis[bit.axis].patterns - 1 - bit.pattern;
            const uint32_t *slot = scene.view[x][bit.axis & 1].slot;
            const uint32_t mask = bit.axis < 2, invert = bit.invert;
            EACH_LANE candidate[i] = candidate[i] << 1 | ((slot[i] >> shift & mask) ^ invert);
        }
        EACH_LANE b->label[i] = scene.farther[x][i] == 0 ? candidate[i] : b->label[i];
    }
}

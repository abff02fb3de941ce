/* Recognises a labelled point set: fold, boxes or points.  The only place that
 * knows how; it looks at points and labels alone, never at names. */
#include "plan.h"

typedef char header_fits[sizeof(struct pdm_plan) <= PDM_PLAN_BYTES(0) ? 1 : -1];

enum { ABSENT = -1 };

/* A grid in the plan's own memory while it is being recognised. */
struct grid {
    int32_t *cell;          /* [levels[1]][levels[0]]: label, or ABSENT */
    size_t levels[2];
    int bits;
};

static double absolute(double x) { return x < 0 ? -x : x; }

static int is_finite(double x) { return x - x == 0; }

/* ---- Sorting point numbers by one coordinate, then the other: heap sort,
 * which needs no memory and no luck. */

static int before(const double *iq, size_t axis, uint32_t p, uint32_t q)
{
    const double *a = iq + 2 * (size_t)p, *b = iq + 2 * (size_t)q;
    if (a[axis] != b[axis])
        return a[axis] < b[axis];
    if (a[1 - axis] != b[1 - axis])
        return a[1 - axis] < b[1 - axis];
    return p < q;
}

static void sift(const double *iq, size_t axis, uint32_t *heap, size_t at, size_t count)
{
    for (;;) {
        size_t child = 2 * at + 1;
        if (child >= count)
            return;
        if (child + 1 < count && before(iq, axis, heap[child], heap[child + 1]))
            child++;
        if (!before(iq, axis, heap[at], heap[child]))
            return;
        const uint32_t t = heap[at];
        heap[at] = heap[child];
        heap[child] = t;
        at = child;
    }
}

static void sort(const double *iq, size_t axis, uint32_t *order, size_t count)
{
    for (size_t i = 0; i < count; i++)
        order[i] = (uint32_t)i;
    for (size_t i = count / 2; i-- > 0;)
        sift(iq, axis, order, i, count);
    for (size_t end = count; end-- > 1;) {
        const uint32_t t = order[0];
        order[0] = order[end];
        order[end] = t;
        sift(iq, axis, order, 0, end);
    }
}

/* ---- Grids */

/* Do the coordinates lie on equal steps?  Fills levels, centre and
 * half_spacing of the axis, in the units of the points. */
static int find_axis(struct pdm_plan *plan, size_t axis, const double *iq,
                     const uint32_t *sorted, double peak)
{
    const double near = 4 * 0x1p-52 * peak;
    const size_t m = plan->order;
    const double low = iq[2 * sorted[0] + axis], high = iq[2 * sorted[m - 1] + axis];
    double step = high - low;
    for (size_t i = 1; i < m; i++) {
        const double gap = iq[2 * sorted[i] + axis] - iq[2 * sorted[i - 1] + axis];
        if (gap > near && gap < step)
            step = gap;
    }
    plan->centre[axis] = low / 2 + high / 2;
    plan->half_spacing[axis] = peak;
    plan->levels[axis] = 1;
    if (step <= near)
        return 1;
    if (step < 256 * near)      /* the tolerance could bend these levels */
        return 0;
    const double steps = (high - low) / step;
    if (!(steps < PDM_MAX_LEVELS - 0.5))
        return 0;
    plan->levels[axis] = (uint16_t)(steps + 1.5);
    step = (high - low) / (plan->levels[axis] - 1);
    plan->half_spacing[axis] = step / 2;
    for (size_t i = 0; i < m; i++) {
        const double x = iq[2 * i + axis] - low;
        const int number = (int)(x / step + 0.5);
        if (absolute(x - number * step) > near)
            return 0;
    }
    return 1;
}

static size_t level_number(const struct pdm_plan *plan, size_t axis, double x)
{
    const double i = (x - plan->centre[axis]) / plan->half_spacing[axis] / 2;
    return (size_t)(i + (plan->levels[axis] - 1) / 2.0 + 0.5);
}

/* Points of unit mean energy, given to the last digit or so, are taken as the
 * exact grid: a^2 = 1 / E with E the mean energy of odd whole coordinates, which
 * is known better than from the rounded points. */
static void find_spacing(struct pdm_plan *plan, const double *iq)
{
    double energy = 0;
    for (size_t i = 0; i < plan->order; i++)
        for (size_t axis = 0; axis < 2; axis++) {
            const double level = 2.0 * (double)level_number(plan, axis, iq[2 * i + axis]) -
                                 (plan->levels[axis] - 1);
            energy += level * level;
        }
    energy /= plan->order;
    double *a = plan->half_spacing;
    const int wide = plan->levels[0] < plan->levels[1];
    const int same = plan->levels[0] == 1 || plan->levels[1] == 1 ||
                     absolute(a[0] - a[1]) <= 8 * 0x1p-52 * a[wide];
    const int unit = same && plan->centre[0] == 0 && plan->centre[1] == 0 &&
                     absolute(a[wide] * a[wide] * energy - 1) <= 16 * 0x1p-52;
    for (size_t axis = 0; axis < 2; axis++) {
        double *square = &plan->spacing_squared[axis], *low = &plan->spacing_squared_low[axis];
        if (unit) {
            *square = 4 / energy;
            *low = ((4 - *square * energy) - product_low(*square, energy)) / energy;
        } else {
            *square = 4 * (a[axis] * a[axis]);
            *low = 4 * product_low(a[axis], a[axis]);
        }
    }
    if (unit) { /* one step of Newton's method towards sqrt(1 / E) */
        const double way = (a[wide] * a[wide] - 1 / energy) + product_low(a[wide], a[wide]);
        a[0] = a[1] = a[wide] - way / (2 * a[wide]);
    }
}

/* Label at (along, across), the "along" axis being I or Q. */
static int32_t label_at(const struct grid *g, size_t along_axis, size_t along, size_t across)
{
    return along_axis == 0 ? g->cell[across * g->levels[0] + along]
                           : g->cell[along * g->levels[0] + across];
}

/* ---- Boxes
 *
 * A box is a set of columns times a set of rows, all its cells occupied, in
 * which each label bit depends on the column alone or on the row alone.
 *
 * Lines ("across" fixed) that hold the same cells are taken together; among
 * them, two columns ("along" fixed) belong to one box where the same bits
 * change along both and these run through the same values.  This splits
 * lines-first; the caller tries both directions and keeps the fewer boxes. */

/* Which bits change along a column, over the lines of a class. */
static uint32_t changing(const struct grid *g, size_t dir, size_t column, size_t first,
                         const uint8_t *class_of, uint8_t class)
{
    uint32_t mask = 0;
    for (size_t r = first; r < g->levels[1 - dir]; r++)
        if (class_of[r] == class)
            mask |= (uint32_t)(label_at(g, dir, column, first) ^ label_at(g, dir, column, r));
    return mask;
}

static int same_run(const struct grid *g, size_t dir, size_t c, size_t d, uint32_t mask,
                    const uint8_t *class_of, uint8_t class)
{
    for (size_t r = 0; r < g->levels[1 - dir]; r++)
        if (class_of[r] == class &&
            ((uint32_t)(label_at(g, dir, c, r) ^ label_at(g, dir, d, r)) & mask))
            return 0;
    return 1;
}

/* Splits the grid; returns the number of boxes, or PDM_MAX_BOXES + 1 if it
 * takes more.  class_of and box_of: for box b the columns with box_of[b][c]
 * and the lines with class_of[line] == line_class[b]. */
struct split {
    uint8_t class_of[PDM_MAX_LEVELS];
    uint8_t line_class[PDM_MAX_BOXES];
    uint8_t in_box[PDM_MAX_BOXES][PDM_MAX_LEVELS];
    uint32_t across_bits[PDM_MAX_BOXES];    /* bits that depend on the line */
    int boxes;
};

static void split_grid(const struct grid *g, size_t dir, struct split *s)
{
    const size_t columns = g->levels[dir], lines = g->levels[1 - dir];
    size_t first_of[PDM_MAX_BOXES];
    uint8_t classes = 0;
    s->boxes = 0;
    for (size_t r = 0; r < lines; r++) {
        uint8_t k = 0;
        for (; k < classes; k++) {
            size_t c = 0;
            while (c < columns && (label_at(g, dir, c, r) == ABSENT) ==
                                      (label_at(g, dir, c, first_of[k]) == ABSENT))
                c++;
            if (c == columns)
                break;
        }
        if (k == classes) {
            if (classes == PDM_MAX_BOXES) {
                s->boxes = PDM_MAX_BOXES + 1;
                return;
            }
            first_of[classes++] = r;
        }
        s->class_of[r] = k;
    }
    for (uint8_t k = 0; k < classes; k++) {
        const int start = s->boxes;
        size_t lead[PDM_MAX_BOXES];
        for (size_t c = 0; c < columns; c++) {
            if (label_at(g, dir, c, first_of[k]) == ABSENT)
                continue;
            const uint32_t mask = changing(g, dir, c, first_of[k], s->class_of, k);
            int b = start;
            while (b < s->boxes && !(mask == s->across_bits[b] &&
                                     same_run(g, dir, c, lead[b], mask, s->class_of, k)))
                b++;
            if (b == s->boxes) {
                if (b == PDM_MAX_BOXES) {
                    s->boxes = PDM_MAX_BOXES + 1;
                    return;
                }
                s->boxes++;
                lead[b] = c;
                s->line_class[b] = k;
                s->across_bits[b] = mask;
                for (size_t i = 0; i < columns; i++)
                    s->in_box[b][i] = 0;
            }
            s->in_box[b][c] = 1;
        }
    }
}

/* Number one axis of a box: finds the independent bit patterns along it and
 * writes the levels with their slots.  axis 0: I.  Returns 0 if there are more
 * patterns than a plan holds. */
static int number_axis(const struct grid *g, struct pdm_plan *plan, struct pdm_box *box, int axis,
                       const size_t *level, size_t count, size_t other, uint32_t mask)
{
    const size_t a = (size_t)axis;
    int lead[PDM_MAX_PATTERNS];
    int patterns = 0;
    for (int k = 0; k < g->bits; k++) {
        const int shift = g->bits - 1 - k;
        if (!(mask >> shift & 1))
            continue;
        const int32_t start = label_at(g, a, level[0], other) >> shift & 1;
        int changes = 0;
        for (size_t i = 1; i < count; i++)
            changes |= (label_at(g, a, level[i], other) >> shift & 1) != start;
        struct pdm_bit *bit = &box->bit[k];
        if (!changes) {
            bit->axis = 2;
            bit->pattern = 0;
            bit->invert = (uint8_t)start;
            continue;
        }
        int p = 0;
        for (; p < patterns; p++) {
            const int lead_shift = g->bits - 1 - lead[p];
            int equal = 1, opposite = 1;
            for (size_t i = 0; i < count; i++) {
                const int32_t l = label_at(g, a, level[i], other);
                const int differ = (l >> shift ^ l >> lead_shift) & 1;
                equal &= !differ;
                opposite &= differ;
            }
            if (equal || opposite) {
                bit->invert = (uint8_t)opposite;
                break;
            }
        }
        if (p == patterns) {
            if (p == PDM_MAX_PATTERNS)
                return 0;
            lead[patterns++] = k;
            bit->invert = 0;
        }
        bit->axis = (uint8_t)axis;
        bit->pattern = (uint8_t)p;
    }
    struct pdm_level *out = (struct pdm_level *)((unsigned char *)plan + plan->used);
    for (size_t i = 0; i < count; i++) {
        const int32_t l = label_at(g, a, level[i], other);
        unsigned slot = 0;
        for (int p = 0; p < patterns; p++)
            slot = slot << 1 | (unsigned)(l >> (g->bits - 1 - lead[p]) & 1);
        out[i].number = (uint8_t)level[i];
        out[i].slot = (uint8_t)slot;
    }
    box->axis[axis].offset = plan->used;
    box->axis[axis].count = (uint16_t)count;
    box->axis[axis].patterns = (uint8_t)patterns;
    plan->used += (uint32_t)(count * sizeof *out);
    return 1;
}

/* Writes the boxes of a split into the plan; 0 if they do not pay. */
static int write_boxes(const struct grid *g, size_t dir, const struct split *s,
                       struct pdm_plan *plan)
{
    size_t cost = 0, slots = 0;
    plan->boxes = (uint8_t)s->boxes;
    for (int b = 0; b < s->boxes; b++) {
        size_t level[2][PDM_MAX_LEVELS], count[2] = {0, 0};
        for (size_t i = 0; i < g->levels[dir]; i++)
            if (s->in_box[b][i])
                level[dir][count[dir]++] = i;
        for (size_t i = 0; i < g->levels[1 - dir]; i++)
            if (s->class_of[i] == s->line_class[b])
                level[1 - dir][count[1 - dir]++] = i;
        for (size_t axis = 0; axis < 2; axis++) {
            const uint32_t mask = axis == dir ? ~s->across_bits[b] : s->across_bits[b];
            if (!number_axis(g, plan, &plan->box[b], (int)axis, level[axis], count[axis],
                             level[1 - axis][0], mask))
                return 0;
            plan->box[b].axis[axis].first_slot = (uint16_t)slots;
            slots += (size_t)1 << plan->box[b].axis[axis].patterns;
            if ((1 << plan->box[b].axis[axis].patterns) > PDM_MAX_LEVELS)
                return 0;
            if (count[axis] > 1)
                cost += (size_t)1 << plan->box[b].axis[axis].patterns;
        }
    }
    return cost <= plan->order && slots <= PDM_MAX_SLOTS;
}

static int find_boxes(struct pdm_plan *plan, const struct grid *g)
{
    struct split s[2];
    split_grid(g, 0, &s[0]);
    split_grid(g, 1, &s[1]);
    const size_t dir = s[1].boxes < s[0].boxes;
    return s[dir].boxes <= PDM_MAX_BOXES && write_boxes(g, dir, &s[dir], plan);
}

/* ---- Fold: one box, 2^p levels an axis, and each bit of the axis the
 * reflected Gray bit of some depth, or its complement. */
static int find_fold(struct pdm_plan *plan)
{
    if (plan->boxes != 1)
        return 0;
    const struct pdm_box *box = &plan->box[0];
    for (int axis = 0; axis < 2; axis++) {
        const unsigned count = box->axis[axis].count, p = box->axis[axis].patterns;
        const struct pdm_level *level = pdm_levels(plan, box, axis);
        if (count != 1u << p || count != plan->levels[axis])
            return 0;
        plan->fold[axis].depths = 0;
        for (unsigned depth = 0; depth < p; depth++)
            for (int k = 0; k < plan->bits; k++) {
                const struct pdm_bit bit = box->bit[k];
                if (bit.axis != axis)
                    continue;
                unsigned differ = 0;
                for (unsigned i = 0; i < count; i++)
                    differ += ((i ^ i >> 1) >> (p - 1 - depth) ^
                               (unsigned)level[i].slot >> (p - 1 - bit.pattern) ^ bit.invert) & 1;
                if (differ != 0 && differ != count)
                    continue;
                /* Reflected Gray code is 1 above the outermost threshold and
                 * 0 beyond every later one. */
                plan->fold[axis].bit[depth] = (uint8_t)k;
                plan->fold[axis].negative[depth] = (uint8_t)((depth == 0) ^ (differ != 0));
                plan->fold[axis].depths++;
            }
        if (plan->fold[axis].depths != p)
            return 0;
    }
    return 1;
}

/* ---- The plan */

static int fail(size_t *where, size_t index, int status)
{
    if (where)
        *where = index;
    return status;
}

size_t pdm_plan_bytes(size_t order)
{
    return order < 2 || order > 65536 || (order & (order - 1)) ? 0 : PDM_PLAN_BYTES(order);
}

int pdm_plan_init(pdm_plan *plan, size_t plan_nbytes, const double *points_iq,
                  const uint32_t *labels, size_t order, size_t *where)
{
    if (!plan || !points_iq || !labels || (uintptr_t)plan % sizeof(double))
        return PDM_BAD_ARGUMENT;
    if (plan_nbytes >= sizeof *plan)
        plan->magic = 0;
    if (!pdm_plan_bytes(order))
        return PDM_BAD_ORDER;
    if (plan_nbytes < pdm_plan_bytes(order))
        return PDM_BAD_SPACE;

    /* Behind the header: first half for results, second half for scratch. */
    unsigned char *tail = (unsigned char *)(plan + 1);
    uint32_t *scratch = (uint32_t *)(void *)(tail + 8 * order);
    plan->order = (uint32_t)order;
    plan->bits = 0;
    while ((size_t)1 << plan->bits < order)
        plan->bits++;

    double peak = 0;
    for (size_t i = 0; i < 2 * order; i++) {
        if (!is_finite(points_iq[i]))
            return fail(where, i / 2, PDM_BAD_POINT);
        if (absolute(points_iq[i]) > peak)
            peak = absolute(points_iq[i]);
    }
    if (!(peak >= 0x1p-100 && peak <= 0x1p100))
        return fail(where, 0, PDM_BAD_POINT);
    for (size_t i = 0; i < order; i++)
        tail[i] = 0;
    for (size_t i = 0; i < order; i++) {
        if (labels[i] >= order || tail[labels[i]])
            return fail(where, i, PDM_BAD_LABEL);
        tail[labels[i]] = 1;
    }
    sort(points_iq, 0, scratch, order);
    size_t repeated = order;    /* the first point that lies on an earlier one */
    for (size_t i = 1; i < order; i++) {
        const double *p = points_iq + 2 * (size_t)scratch[i - 1],
                     *q = points_iq + 2 * (size_t)scratch[i];
        if (p[0] == q[0] && p[1] == q[1] && scratch[i] < repeated)
            repeated = scratch[i];
    }
    if (repeated < order)
        return fail(where, repeated, PDM_BAD_POINT);
    plan->unit = 1;
    while (peak * plan->unit >= 1)
        plan->unit /= 2;
    while (peak * plan->unit < 0.5)
        plan->unit *= 2;

    plan->centre[1] = plan->half_spacing[1] = 0;
    plan->levels[1] = 0;
    int grid = find_axis(plan, 0, points_iq, scratch, peak);
    if (grid) {
        sort(points_iq, 1, scratch, order);
        grid = find_axis(plan, 1, points_iq, scratch, peak);
    }
    const size_t cells = (size_t)plan->levels[0] * plan->levels[1];
    plan->boxes = 0;
    plan->used = sizeof *plan;
    plan->family = PDM_POINTS;
    for (size_t axis = 0; axis < 2; axis++)
        plan->spacing_squared[axis] = plan->spacing_squared_low[axis] = 0;
    if (grid && cells <= 2 * order) {
        const struct grid g = {(int32_t *)(void *)scratch, {plan->levels[0], plan->levels[1]},
                               plan->bits};
        for (size_t i = 0; i < cells; i++)
            g.cell[i] = ABSENT;
        for (size_t i = 0; i < order; i++) {
            int32_t *cell = &g.cell[level_number(plan, 1, points_iq[2 * i + 1]) * g.levels[0] +
                                    level_number(plan, 0, points_iq[2 * i])];
            grid &= *cell == ABSENT;    /* two points within the tolerance: no grid */
            *cell = (int32_t)labels[i];
        }
        find_spacing(plan, points_iq);
        if (grid && find_boxes(plan, &g))
            plan->family = find_fold(plan) ? PDM_FOLD : PDM_BOXES;
    }
    if (plan->family == PDM_POINTS) {
        double *coordinate = (double *)(void *)tail;
        plan->boxes = 0;
        plan->levels[0] = plan->levels[1] = 0;
        for (size_t i = 0; i < order; i++) {
            coordinate[labels[i]] = points_iq[2 * i] * plan->unit;
            coordinate[order + labels[i]] = points_iq[2 * i + 1] * plan->unit;
        }
        plan->used = (uint32_t)(sizeof *plan + 16 * order);
    }
    for (size_t axis = 0; axis < 2; axis++) {   /* of no meaning for points */
        plan->centre[axis] *= plan->unit;
        plan->half_spacing[axis] *= plan->unit;
        plan->spacing_squared[axis] *= plan->unit * plan->unit;
        plan->spacing_squared_low[axis] *= plan->unit * plan->unit;
    }
    plan->magic = PDM_MAGIC;
    return PDM_OK;
}

static int finished(const pdm_plan *plan) { return plan && plan->magic == PDM_MAGIC; }

size_t pdm_plan_used(const pdm_plan *plan) { return finished(plan) ? plan->used : 0; }

size_t pdm_plan_order(const pdm_plan *plan) { return finished(plan) ? plan->order : 0; }

int pdm_plan_bits(const pdm_plan *plan) { return finished(plan) ? plan->bits : 0; }

int pdm_plan_family(const pdm_plan *plan) { return finished(plan) ? plan->family : -1; }

int pdm_plan_boxes(const pdm_plan *plan) { return finished(plan) ? plan->boxes : 0; }

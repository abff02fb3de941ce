/* Template (see real.h).  A whole call, block by block. */

/* The number of bits as a constant, so that the compiler can lay out vectors
 * for it; not in firmware, where size counts. */
#if PDM_LANES >= 16
#define WITH_BITS(n, f, ...)                                                                    \
    switch (n) {                                                                                \
    case 1: f(1, __VA_ARGS__); break;                                                           \
    case 2: f(2, __VA_ARGS__); break;                                                           \
    case 3: f(3, __VA_ARGS__); break;                                                           \
    case 4: f(4, __VA_ARGS__); break;                                                           \
    case 5: f(5, __VA_ARGS__); break;                                                           \
    case 6: f(6, __VA_ARGS__); break;                                                           \
    case 7: f(7, __VA_ARGS__); break;                                                           \
    case 8: f(8, __VA_ARGS__); break;                                                           \
    case 9: f(9, __VA_ARGS__); break;                                                           \
    case 10: f(10, __VA_ARGS__); break;                                                         \
    case 11: f(11, __VA_ARGS__); break;                                                         \
    case 12: f(12, __VA_ARGS__); break;                                                         \
    case 13: f(13, __VA_ARGS__); break;                                                         \
    case 14: f(14, __VA_ARGS__); break;                                                         \
    case 15: f(15, __VA_ARGS__); break;                                                         \
    default: f(16, __VA_ARGS__); break;                                                         \
    }
#else
#define WITH_BITS(n, f, ...) f(n, __VA_ARGS__);
#endif

static void F(slice)(const struct pdm_call *call, size_t first, int count, struct F(block) *b)
{
    /* the nearest point does not depend on N0, which may be extreme */
    EACH_LANE b->noise[i] = b->noise[i] < NO_INFORMATION ? 1 : NO_INFORMATION;
    if (call->plan->family == PDM_POINTS)
        F(points_nearest)(call->plan, b, b->label);
    else
        F(boxes_slice)(call->plan, b);
    for (int i = 0; i < count; i++)
        ((uint16_t *)call->out)[first + (size_t)i] =
            (uint16_t)(b->noise[i] < NO_INFORMATION && b->poison[i] == 0 ? b->label[i] : 0);
}

static void F(run)(const struct pdm_call *call)
{
    const struct pdm_plan *plan = call->plan;
    const int rule = call->settings.rule, n = plan->bits;
    struct F(fold_table) table;
    struct F(block) b;
    const int folds = plan->family == PDM_FOLD && call->output != PDM_OUT_LABEL &&
                      (rule == PDM_LINEAR || (rule == PDM_MAX_LOG && !call->prior));
    if (folds)
        F(make_fold_table)(plan, rule == PDM_LINEAR, call->settings.positive_bit, &table);
    for (size_t first = 0; first < call->count; first += LANES) {
        const int count = call->count - first < LANES ? (int)(call->count - first) : LANES;
        const size_t start = first * (size_t)n;
        real buffer[PDM_MAX_BITS * LANES], *llr = buffer;
        if (call->output == PDM_OUT_REAL && count == LANES)
            llr = (real *)call->out + start;    /* no need for a copy */
        F(load)(call, first, count, &b);
        if (call->output == PDM_OUT_LABEL) {
            F(slice)(call, first, count, &b);
            continue;
        }
        if (folds) {
            if (first == 0 && b.same_noise)
                F(slopes)(n, plan, &b, &table, table.slope);
            WITH_BITS(n, F(fold), plan, &table, &b, llr)
            if (b.lifted || b.has_prior)
                F(fold_rarities)(plan, &b, &call->settings, llr);
        } else {
            if (plan->family == PDM_POINTS && rule == PDM_EXACT)
                F(points_exact)(plan, &b);
            else if (plan->family == PDM_POINTS)
                F(points_max_log)(plan, &b);
            else if (rule == PDM_EXACT)
                F(boxes_exact)(plan, &b);
            else
                F(boxes_max_log)(plan, &b);
            WITH_BITS(n, F(finish), &call->settings, &b, llr)
        }
        F(store)(call, start, count * n, llr);
    }
}
#undef WITH_BITS

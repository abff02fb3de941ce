/* Template (see real.h).  A whole call, block by block. */

static void F(run)(const struct pdm_call *call)
{
    const struct pdm_plan *plan = call->plan;
    const int rule = call->settings.rule;
    for (size_t first = 0; first < call->count; first += LANES) {
        const int count = call->count - first < LANES ? (int)(call->count - first) : LANES;
        struct F(block) b;
        F(load)(call, first, count, &b);
        if (call->output == PDM_OUT_LABEL) {
            if (plan->family == PDM_POINTS)
                F(points_nearest)(plan, &b, b.label);
            else
                F(boxes_slice)(plan, &b);
        } else if (plan->family == PDM_POINTS) {
            if (rule == PDM_EXACT)
                F(points_exact)(plan, &b);
            else
                F(points_max_log)(plan, &b);
        } else if (rule == PDM_EXACT) {
            F(boxes_exact)(plan, &b);
        } else if (rule == PDM_MAX_LOG && (plan->family == PDM_BOXES || b.has_prior)) {
            F(boxes_max_log)(plan, &b);
        } else {
            F(fold_max_log)(plan, &b, rule == PDM_LINEAR);
            if (b.has_prior)
                for (int k = 0; k < plan->bits; k++)
                    EACH_LANE b.llr[k][i] += b.prior[k][i];
        }
        F(store)(call, first, count, &b);
    }
}

/* Public calls: check everything, then hand a checked call to the kernels of
 * the level in use. */
#include "cpu.h"
#include "kernels.h"

/* Fastest first; the last one runs everywhere. */
static const struct {
    int need;
    const struct pdm_kernels *kernels;
} levels[] = {
#ifdef PDM_HAVE_v4
    {4, &pdm_kernels_v4},
#endif
#ifdef PDM_HAVE_v3
    {3, &pdm_kernels_v3},
#endif
    {0, &pdm_kernels_baseline},
};

/* NULL until it is first asked for.  Several threads may set it at once: they
 * all store the same pointer. */
static const struct pdm_kernels *active;
#if defined(__GNUC__)
#define LOAD(p) __atomic_load_n(&(p), __ATOMIC_ACQUIRE)
#define STORE(p, v) __atomic_store_n(&(p), (v), __ATOMIC_RELEASE)
#else
#define LOAD(p) (*(const struct pdm_kernels *volatile *)&(p))
#define STORE(p, v) (*(const struct pdm_kernels *volatile *)&(p) = (v))
#endif

static int same_text(const char *a, const char *b)
{
    while (*a && *a == *b)
        a++, b++;
    return *a == *b;
}

const char *pdm_available_isa(size_t index)
{
    const int have = pdm_cpu_level();
    for (size_t i = 0; i < sizeof levels / sizeof *levels; i++)
        if (have >= levels[i].need && index-- == 0)
            return levels[i].kernels->name;
    return NULL;
}

int pdm_use_isa(const char *name)
{
    const int have = pdm_cpu_level();
    for (size_t i = 0; i < sizeof levels / sizeof *levels; i++)
        if (have >= levels[i].need &&
            (!name || same_text(name, "auto") || same_text(name, levels[i].kernels->name))) {
            STORE(active, levels[i].kernels);
            return PDM_OK;
        }
    return PDM_BAD_ISA;
}

static const struct pdm_kernels *kernels(void)
{
    if (!LOAD(active))
        (void)pdm_use_isa(NULL);
    return LOAD(active);
}

const char *pdm_isa(void) { return kernels()->name; }

const char *pdm_version(void) { return PYDEMAP_VERSION; }

const char *pdm_status_text(int status)
{
    switch (status) {
    case PDM_OK: return "no error";
    case PDM_BAD_ARGUMENT: return "a pointer is NULL or misaligned, or a count fits nothing";
    case PDM_BAD_ORDER: return "the order is not a power of two from 2 to 65536";
    case PDM_BAD_POINT:
        return "a point is not finite, coincides with another, or is not within 2^-100 .. 2^100";
    case PDM_BAD_LABEL: return "the labels are not 0 .. order-1, each once";
    case PDM_BAD_SPACE: return "the memory given for the plan is too small";
    case PDM_BAD_PLAN: return "the memory holds no finished plan";
    case PDM_BAD_RULE: return "the rule is unknown, or linear for a constellation that is no Gray grid";
    case PDM_BAD_NOISE: return "a noise variance is not finite and > 0";
    case PDM_BAD_WORD: return "a word has too few or too many bits, or a step that is not within 2^-126 .. 2^127";
    case PDM_BAD_ISA: return "no such instruction-set level on this machine";
    }
    return "unknown status";
}

static int counts_fit(const void *array, size_t count, size_t n_symbols)
{
    return (array && (count == 1 || count == n_symbols)) || n_symbols == 0;
}

/* What every call needs; arrays that are given for all symbols are walked with
 * stride 1, a single value with stride 0. */
static int check(struct pdm_call *call, size_t n_gain)
{
    if (!call->plan || call->plan->magic != PDM_MAGIC)
        return PDM_BAD_PLAN;
    if (call->count && (!call->y || !call->out))
        return PDM_BAD_ARGUMENT;
    if (call->gain && !counts_fit(call->gain, n_gain, call->count))
        return PDM_BAD_ARGUMENT;
    call->gain_stride = n_gain != 1;
    return PDM_OK;
}

static int check_settings(struct pdm_call *call, const pdm_settings *settings, size_t n_noise,
                          size_t n_gain, int most_bits)
{
    if (!settings)
        return PDM_BAD_ARGUMENT;
    const int status = check(call, n_gain);
    if (status != PDM_OK)
        return status;
    if (!counts_fit(call->noise, n_noise, call->count) || settings->positive_bit < 0 ||
        settings->positive_bit > 1 || settings->extrinsic < 0 || settings->extrinsic > 1)
        return PDM_BAD_ARGUMENT;
    if (settings->rule < PDM_EXACT || settings->rule > PDM_LINEAR ||
        (settings->rule == PDM_LINEAR && call->plan->family != PDM_FOLD))
        return PDM_BAD_RULE;
    /* the kernels use the step as a float */
    if (most_bits && (settings->word_bits < 2 || settings->word_bits > most_bits ||
                      !(settings->word_step >= 0x1p-126 && settings->word_step <= 0x1p127)))
        return PDM_BAD_WORD;
    call->settings.rule = settings->rule;
    call->settings.extrinsic = settings->extrinsic;
    call->settings.positive_bit = settings->positive_bit;
    if (most_bits) {
        call->settings.word_bits = settings->word_bits;
        call->settings.word_step = settings->word_step;
    }
    call->noise_stride = n_noise != 1;
    return PDM_OK;
}

/* Field by field: an initialiser would have compilers call memset. */
static void request(struct pdm_call *call, const pdm_plan *plan, size_t count, const void *y,
                    const void *noise, const void *gain, const void *prior, void *out,
                    enum pdm_output output)
{
    call->plan = plan;
    call->settings.rule = PDM_MAX_LOG;
    call->settings.extrinsic = 0;
    call->settings.positive_bit = 0;
    call->settings.word_bits = 2;
    call->settings.word_step = 1;
    call->count = count;
    call->y = y;
    call->noise = noise;
    call->noise_stride = 0;
    call->gain = gain;
    call->gain_stride = 0;
    call->prior = prior;
    call->out = out;
    call->output = output;
}

static int run_f32(struct pdm_call *call, const pdm_settings *settings, size_t n_noise,
                   size_t n_gain, int most_bits, size_t *where)
{
    const int status = check_settings(call, settings, n_noise, n_gain, most_bits);
    if (status != PDM_OK)
        return status;
    const float *noise = call->noise;
    for (size_t i = 0; i < (call->count ? n_noise : 0); i++)
        if (!(noise[i] > 0 && noise[i] - noise[i] == 0)) {
            if (where)
                *where = i;
            return PDM_BAD_NOISE;
        }
    kernels()->run_f32(call);
    return PDM_OK;
}

int pdm_demap_f32(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const float *y_iq, const float *noise_variance, size_t noise_count,
                  const float *gain_iq, size_t gain_count, const float *prior,
                  float *llr, size_t *where)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, noise_variance, gain_iq, prior, llr, PDM_OUT_REAL);
    return run_f32(&call, settings, noise_count, gain_count, 0, where);
}

int pdm_demap_i8(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                 const float *y_iq, const float *noise_variance, size_t noise_count,
                 const float *gain_iq, size_t gain_count, const float *prior,
                 int8_t *word, size_t *where)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, noise_variance, gain_iq, prior, word, PDM_OUT_I8);
    return run_f32(&call, settings, noise_count, gain_count, 8, where);
}

int pdm_demap_i16(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const float *y_iq, const float *noise_variance, size_t noise_count,
                  const float *gain_iq, size_t gain_count, const float *prior,
                  int16_t *word, size_t *where)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, noise_variance, gain_iq, prior, word, PDM_OUT_I16);
    return run_f32(&call, settings, noise_count, gain_count, 16, where);
}

int pdm_demap_f64(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const double *y_iq, const double *noise_variance, size_t noise_count,
                  const double *gain_iq, size_t gain_count, const double *prior,
                  double *llr, size_t *where)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, noise_variance, gain_iq, prior, llr, PDM_OUT_REAL);
    const int status = check_settings(&call, settings, noise_count, gain_count, 0);
    if (status != PDM_OK)
        return status;
    for (size_t i = 0; i < (n_symbols ? noise_count : 0); i++)
        if (!(noise_variance[i] > 0 && noise_variance[i] - noise_variance[i] == 0)) {
            if (where)
                *where = i;
            return PDM_BAD_NOISE;
        }
    kernels()->run_f64(&call);
    return PDM_OK;
}

int pdm_slice_f32(const pdm_plan *plan, size_t n_symbols, const float *y_iq,
                  const float *gain_iq, size_t gain_count, uint16_t *label)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, NULL, gain_iq, NULL, label, PDM_OUT_LABEL);
    const int status = check(&call, gain_count);
    if (status == PDM_OK)
        kernels()->run_f32(&call);
    return status;
}

int pdm_slice_f64(const pdm_plan *plan, size_t n_symbols, const double *y_iq,
                  const double *gain_iq, size_t gain_count, uint16_t *label)
{
    struct pdm_call call;
    request(&call, plan, n_symbols, y_iq, NULL, gain_iq, NULL, label, PDM_OUT_LABEL);
    const int status = check(&call, gain_count);
    if (status == PDM_OK)
        kernels()->run_f64(&call);
    return status;
}

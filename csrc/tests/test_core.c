/* Tests of the library against definitions written out here in plain double
 * arithmetic.  They use libm; the library does not.
 *
 *     test_core            all tests, at every instruction-set level at hand
 *     test_core --hash     prints the hash of the outputs at each level
 *
 * A failed check prints where, the input, what came and what was wanted; the
 * exit status is then 1.  All input comes from a fixed integer generator and
 * exact operations, so every machine tests the same numbers. */
#include "pydemap.h"

#include <float.h>
#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* FNV-1a over all outputs of output_hash(): the same at every level, with
 * every compiler, on every machine. */
static const uint64_t wanted_hash = UINT64_C(0xa8f492087ff5c49f);

/* The tests in full up to this order, beyond it recognition and hash alone: an
 * emulator may want less. */
#ifndef TEST_UP_TO
#define TEST_UP_TO 65536
#endif

/* ---- Checks */

static const char *context = "";    /* constellation and level of the moment */
static long checks, failures;

static void failed(int line, const char *condition, const char *format, ...)
{
    va_list arguments;
    if (++failures > 20)    /* enough to read */
        return;
    printf("test_core.c:%d: [%s] not so: %s: ", line, context, condition);
    va_start(arguments, format);
    vprintf(format, arguments);
    va_end(arguments);
    printf("\n");
}

#define CHECK(condition, ...) \
    do { \
        checks++; \
        if (!(condition)) \
            failed(__LINE__, #condition, __VA_ARGS__); \
    } while (0)

/* ---- Input */

static uint64_t state;

static uint64_t draw(void)  /* splitmix64 */
{
    uint64_t z = state += UINT64_C(0x9e3779b97f4a7c15);
    z = (z ^ z >> 30) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ z >> 27) * UINT64_C(0x94d049bb133111eb);
    return z ^ z >> 31;
}

static size_t draw_below(size_t n) { return (size_t)(draw() >> 32) % n; }

/* Never two draws in one expression: C leaves their order open. */
static double uniform(double low, double high)
{
    return low + (high - low) * ((double)(draw() >> 11) * 0x1p-53);
}

/* Spread over `count` octaves from 2^lowest. */
static double octave(size_t count, int lowest)
{
    const double fraction = uniform(1, 2);
    return ldexp(fraction, (int)draw_below(count) + lowest);
}

static double plus_or_minus(double x) { return draw() & 1 ? x : -x; }

/* ---- Constellations */

enum { MOST_POINTS = 1024, MOST_BITS = 10, SYMBOLS = 96 };

static struct set {
    size_t order;
    int bits;
    double iq[2 * MOST_POINTS];
    uint32_t label[MOST_POINTS];
} set;

static void add_point(double re, double im, uint32_t label)
{
    set.iq[2 * set.order] = re;
    set.iq[2 * set.order + 1] = im;
    set.label[set.order++] = label;
}

static uint32_t gray(size_t i) { return (uint32_t)(i ^ i >> 1); }

static void make_grid(size_t columns, size_t rows)
{
    for (size_t i = 0; i < columns; i++)
        for (size_t j = 0; j < rows; j++)
            add_point(2. * (double)i - (double)(columns - 1), 2. * (double)j - (double)(rows - 1),
                      gray(i) * (uint32_t)rows + gray(j));
}

/* Gray, but with the bits in another order, some of them inverted, and the
 * grid moved and scaled. */
static void make_turned(size_t columns, size_t rows)
{
    make_grid(columns, rows);
    for (size_t i = 0; i < set.order; i++) {
        const uint32_t l = set.label[i];
        set.iq[2 * i] = 0.75 * set.iq[2 * i] + 1.5;
        set.iq[2 * i + 1] = 0.375 * set.iq[2 * i + 1] - 0.25;
        set.label[i] = (uint32_t)((l << 2 | l >> 4) & 63) ^ 37;
    }
}

static void make_natural(size_t columns, size_t rows)
{
    for (size_t i = 0; i < columns; i++)
        for (size_t j = 0; j < rows; j++)
            add_point(2. * (double)i - (double)(columns - 1), 2. * (double)j - (double)(rows - 1),
                      (uint32_t)(i * rows + j));
}

/* A Gray rectangle whose outer columns are folded onto the top and bottom, so
 * that the outline becomes a cross. */
static void make_cross(size_t columns, size_t rows)
{
    const double s = (double)rows / 2;
    make_grid(columns, rows);
    for (size_t i = 0; i < set.order; i++) {
        const double x = set.iq[2 * i], y = set.iq[2 * i + 1];
        if (fabs(x) <= 3 * s)
            continue;
        const int outer = fabs(y) > s;
        set.iq[2 * i] = copysign(outer ? fabs(x) - 2 * s : 4 * s - fabs(x), x);
        set.iq[2 * i + 1] = copysign(outer ? 4 * s - fabs(y) : fabs(y) + 2 * s, y);
    }
}

/* Rec. ITU-T G.9701, constellation encoder, 5 bits. */
static void make_itu32(size_t columns, size_t rows)
{
    static const signed char map[6][6] = {
        {-1, 24, 26, 20, 22, -1}, {19, 9, 11, 1, 3, 17},  {18, 8, 10, 0, 2, 16},
        {31, 13, 15, 5, 7, 29},   {30, 12, 14, 4, 6, 28}, {-1, 25, 27, 21, 23, -1},
    };
    for (size_t r = 0; r < rows; r++)
        for (size_t c = 0; c < columns; c++)
            if (map[r][c] >= 0)
                add_point(2. * (double)c - 5, 5 - 2. * (double)r, (uint32_t)map[r][c]);
}

static void make_ring(size_t columns, size_t rows)
{
    const double d = 0.70710678118654752440;
    const double iq[8][2] = {{1, 0}, {d, d}, {0, 1}, {-d, d}, {-1, 0}, {-d, -d}, {0, -1}, {d, -d}};
    for (size_t i = 0; i < columns * rows; i++)
        add_point(iq[i][0], iq[i][1], gray(i));
}

static void shuffle_labels(void)
{
    for (size_t i = set.order; i > 1; i--) {
        const size_t j = draw_below(i);
        const uint32_t t = set.label[i - 1];
        set.label[i - 1] = set.label[j];
        set.label[j] = t;
    }
}

static void make_shuffled(size_t columns, size_t rows)
{
    make_grid(columns, rows);
    shuffle_labels();
}

static void make_random(size_t columns, size_t rows)
{
    for (size_t i = 0; i < columns * rows; i++) {
        const double re = uniform(-3, 3);
        add_point(re, uniform(-3, 3), (uint32_t)i);
    }
    shuffle_labels();
}

static const struct made {
    const char *name;
    void (*make)(size_t columns, size_t rows);
    size_t columns, rows;
    int family, boxes;
} made[] = {
    {"2 points", make_grid, 2, 1, PDM_FOLD, 1},
    {"square 4", make_grid, 2, 2, PDM_FOLD, 1},
    {"square 16", make_grid, 4, 4, PDM_FOLD, 1},
    {"square 64", make_grid, 8, 8, PDM_FOLD, 1},
    {"square 256", make_grid, 16, 16, PDM_FOLD, 1},
    {"square 1024", make_grid, 32, 32, PDM_FOLD, 1},
    {"rectangle 16 x 8", make_grid, 16, 8, PDM_FOLD, 1},
    {"column of 8", make_grid, 1, 8, PDM_FOLD, 1},
    {"turned 64", make_turned, 8, 8, PDM_FOLD, 1},
    {"natural 64", make_natural, 8, 8, PDM_BOXES, 1},
    {"cross 32", make_cross, 8, 4, PDM_BOXES, 2},
    {"cross 128", make_cross, 16, 8, PDM_BOXES, 2},
    {"cross 512", make_cross, 32, 16, PDM_BOXES, 2},
    {"ITU-T 32", make_itu32, 6, 6, PDM_BOXES, 3},
    {"ring 8", make_ring, 8, 1, PDM_POINTS, 0},
    {"shuffled 16", make_shuffled, 4, 4, PDM_POINTS, 0},
    {"random 32", make_random, 8, 4, PDM_POINTS, 0},
};
enum { N_MADE = sizeof made / sizeof *made };

static double plan_memory[PDM_PLAN_BYTES(MOST_POINTS) / sizeof(double)];
static pdm_plan *const plan = (pdm_plan *)(void *)plan_memory;

static int init_plan(size_t *where)
{
    return pdm_plan_init(plan, sizeof plan_memory, set.iq, set.label, set.order, where);
}

/* Sets `set` and `plan`. */
static void prepare(const struct made *m)
{
    state = 1;
    set.order = 0;
    m->make(m->columns, m->rows);
    for (set.bits = 0; (size_t)1 << set.bits < set.order; set.bits++) {
    }
    const int status = init_plan(NULL);
    CHECK(status == PDM_OK, "%s: %s", m->name, pdm_status_text(status));
}

static int bit_of(size_t point, int k) { return (int)(set.label[point] >> (set.bits - 1 - k) & 1); }

static void measure(double *rms, double *peak)
{
    double energy = 0, most = 0;
    for (size_t i = 0; i < set.order; i++) {
        const double e = set.iq[2 * i] * set.iq[2 * i] + set.iq[2 * i + 1] * set.iq[2 * i + 1];
        energy += e / (double)set.order;
        most = e > most ? e : most;
    }
    *rms = sqrt(energy);
    *peak = sqrt(most);
}

/* ---- A call, for every output type */

enum type { F32, F64, I8, I16 };
static const char *const type_name[] = {"f32", "f64", "i8", "i16"};
static const size_t type_size[] = {sizeof(float), sizeof(double), sizeof(int8_t), sizeof(int16_t)};

/* Which input a call uses: counts of N0 and gain (0: none), prior or not. */
struct shape {
    size_t n0, gain;
    int prior;
};

/* The arrays of a call: floats, or doubles for F64. */
struct input {
    const void *y, *n0, *h, *prior;
};

static int demap(enum type type, const pdm_plan *p, const pdm_settings *s, size_t n, struct input in,
                 struct shape shape, void *out, size_t *where)
{
    const void *const h = shape.gain ? in.h : NULL, *const prior = shape.prior ? in.prior : NULL;
    switch (type) {
    case F32: return pdm_demap_f32(p, s, n, in.y, in.n0, shape.n0, h, shape.gain, prior, out, where);
    case F64: return pdm_demap_f64(p, s, n, in.y, in.n0, shape.n0, h, shape.gain, prior, out, where);
    case I8: return pdm_demap_i8(p, s, n, in.y, in.n0, shape.n0, h, shape.gain, prior, out, where);
    case I16: return pdm_demap_i16(p, s, n, in.y, in.n0, shape.n0, h, shape.gain, prior, out, where);
    }
    return -1;
}

/* Input of n symbols, as doubles and as floats of the same value. */
static struct batch {
    size_t n;
    double y[2 * SYMBOLS], n0[SYMBOLS], h[2 * SYMBOLS], prior[MOST_BITS * SYMBOLS];
    float y_f[2 * SYMBOLS], n0_f[SYMBOLS], h_f[2 * SYMBOLS], prior_f[MOST_BITS * SYMBOLS];
} batch;

/* Room for the output of any type. */
union output {
    float f[MOST_BITS * SYMBOLS];
    double d[MOST_BITS * SYMBOLS];
    int8_t i8[MOST_BITS * SYMBOLS];
    int16_t i16[MOST_BITS * SYMBOLS];
};

static double value(enum type type, const union output *out, size_t i)
{
    return type == F32 ? (double)out->f[i] : type == F64 ? out->d[i] : type == I8 ? out->i8[i] : out->i16[i];
}

static struct input batch_input(enum type type)
{
    if (type == F64)
        return (struct input){batch.y, batch.n0, batch.h, batch.prior};
    return (struct input){batch.y_f, batch.n0_f, batch.h_f, batch.prior_f};
}

/* The batch through `plan`; every call must succeed. */
static void demap_batch(enum type type, const pdm_settings *s, struct shape shape, union output *out)
{
    const int status = demap(type, plan, s, batch.n, batch_input(type), shape, out, NULL);
    CHECK(status == PDM_OK, "rule %d, %s: %s", s->rule, type_name[type], pdm_status_text(status));
}

/* Makes the two forms of the batch the same: floats from doubles, and back
 * unless the call is to be one in float64. */
static void settle(enum type type)
{
    struct { double *d; float *f; size_t count; } const arrays[] = {
        {batch.y, batch.y_f, 2 * batch.n},
        {batch.n0, batch.n0_f, batch.n},
        {batch.h, batch.h_f, 2 * batch.n},
        {batch.prior, batch.prior_f, (size_t)set.bits * batch.n},
    };
    for (size_t a = 0; a < sizeof arrays / sizeof *arrays; a++)
        for (size_t i = 0; i < arrays[a].count; i++) {
            arrays[a].f[i] = (float)arrays[a].d[i];
            if (type != F64)
                arrays[a].d[i] = (double)arrays[a].f[i];
        }
}

/* Es/N0 from about -40 to +80 dB, most samples near the points and some up to
 * 16 times as far away as the outermost. */
static void fill_batch(enum type type, size_t n)
{
    double rms, peak;
    measure(&rms, &peak);
    batch.n = n;
    for (size_t i = 0; i < n; i++) {
        batch.n0[i] = octave(39, -26) * rms * rms;
        const double far = uniform(1, 11), reach = draw_below(4) ? 1.25 * peak : far * peak;
        for (size_t j = 2 * i; j < 2 * i + 2; j++) {
            batch.h[j] = octave(7, -3);
            batch.h[j] = plus_or_minus(batch.h[j]);
            batch.y[j] = uniform(-reach, reach);
        }
        for (int k = 0; k < set.bits; k++)
            batch.prior[i * (size_t)set.bits + (size_t)k] = uniform(-6, 6);
    }
    settle(type);
}

/* ---- The definition */

struct truth {
    double llr;
    double moves;   /* |change of the LLR| for a change of y by its own scale */
};

/* Metric of a point s relative to point r, both times h: (|y-hr|^2 - |y-hs|^2) / N0
 * in the form that loses no digits, (hs-hr).(2y-hs-hr) / N0. */
static double metric(const double *y, double n0, const double *h, const double *s, const double *r)
{
    const double d[2] = {s[0] - r[0], s[1] - r[1]}, m[2] = {s[0] + r[0], s[1] + r[1]};
    const double dr = d[0] * h[0] - d[1] * h[1], di = d[0] * h[1] + d[1] * h[0];
    const double mr = m[0] * h[0] - m[1] * h[1], mi = m[0] * h[1] + m[1] * h[0];
    return (dr * (2 * y[0] - mr) + di * (2 * y[1] - mi)) / n0;
}

static size_t nearest(const double *y, const double *h)
{
    size_t best = 0;
    for (size_t i = 1; i < set.order; i++)
        if (metric(y, 1, h, set.iq + 2 * i, set.iq + 2 * best) > 0)
            best = i;
    return best;
}

static double larger(double a, double b) { return a > b ? a : b; }

/* Linear: distance of y/h to the nearest threshold of the bit, times 4 a |h|^2 / N0.
 * The thresholds lie halfway between neighbours, on the row and the column of
 * the nearest point, that differ in the bit. */
static struct truth define_linear(int k, const double *y, double n0, const double *h, double scale)
{
    const double power = h[0] * h[0] + h[1] * h[1];
    const double u[2] = {(y[0] * h[0] + y[1] * h[1]) / power, (y[1] * h[0] - y[0] * h[1]) / power};
    const size_t origin = nearest(y, h);
    double distance = HUGE_VAL, slope = 0;
    for (size_t axis = 0; axis < 2; axis++) {
        size_t line[MOST_POINTS], count = 0;
        double spacing = HUGE_VAL;
        for (size_t i = 0; i < set.order; i++)
            if (set.iq[2 * i + 1 - axis] == set.iq[2 * origin + 1 - axis])
                line[count++] = i;
        for (size_t i = 1; i < count; i++)
            spacing = fmin(spacing, fabs(set.iq[2 * line[i] + axis] - set.iq[2 * line[0] + axis]));
        for (size_t i = 0; i < count; i++)
            for (size_t j = 0; j < i; j++) {
                const double p = set.iq[2 * line[i] + axis], q = set.iq[2 * line[j] + axis];
                if (bit_of(line[i], k) != bit_of(line[j], k) && fabs(p - q) < 1.5 * spacing) {
                    distance = fmin(distance, fabs(u[axis] - (p + q) / 2));
                    slope = 2 * spacing * power / n0;
                }
            }
    }
    return (struct truth){(bit_of(origin, k) ? -1 : 1) * slope * distance, slope / sqrt(power) * scale};
}

/* LLRs of one symbol: from the sums over all points with the bit 0 and 1, or
 * from their largest terms. */
static void define(const pdm_settings *settings, const double *y, double n0, const double *h,
                   const double *prior, struct truth *truth)
{
    double rms, peak;
    measure(&rms, &peak);
    const double size = sqrt(h[0] * h[0] + h[1] * h[1]);
    const double scale = larger(sqrt(y[0] * y[0] + y[1] * y[1]), size * rms);
    const double turn = settings->positive_bit ? -1 : 1;
    const size_t origin = nearest(y, h);
    double all_priors = 0;
    static double m[MOST_POINTS];
    for (size_t i = 0; i < set.order; i++) {
        m[i] = metric(y, n0, h, set.iq + 2 * i, set.iq + 2 * origin);
        for (int k = 0; prior && k < set.bits; k++)
            m[i] += bit_of(i, k) ? 0 : turn * prior[k];
    }
    for (int k = 0; prior && k < set.bits; k++)
        all_priors += fabs(prior[k]);
    for (int k = 0; k < set.bits; k++) {
        double top[2] = {-HUGE_VAL, -HUGE_VAL}, sum[2] = {0, 0}, lost[2] = {0, 0};
        double mean[2][2] = {{0, 0}, {0, 0}};
        size_t at[2] = {0, 0};
        for (size_t i = 0; i < set.order; i++) {
            const int b = bit_of(i, k);
            if (m[i] > top[b]) {
                top[b] = m[i];
                at[b] = i;
            }
        }
        for (size_t i = 0; i < set.order; i++) {
            const int b = bit_of(i, k);
            if (settings->rule == PDM_EXACT ? m[i] - top[b] < -60 : i != at[b])
                continue;       /* e^-60 is nothing beside 1 in a double */
            const double weight = exp(m[i] - top[b]);
            const double with = sum[b] + weight;    /* compensated: what the addition lost */
            lost[b] += sum[b] > weight ? sum[b] - with + weight : weight - with + sum[b];
            sum[b] = with;
            mean[b][0] += weight * set.iq[2 * i];
            mean[b][1] += weight * set.iq[2 * i + 1];
        }
        sum[0] += lost[0];
        sum[1] += lost[1];
        const double dr = mean[0][0] / sum[0] - mean[1][0] / sum[1];
        const double di = mean[0][1] / sum[0] - mean[1][1] / sum[1];
        struct truth t = {top[0] - top[1] + log(sum[0] / sum[1]),
                          2 * size * sqrt(dr * dr + di * di) / n0 * scale};
        if (settings->rule == PDM_LINEAR) {
            t = define_linear(k, y, n0, h, scale);
            t.llr += prior ? turn * prior[k] : 0;
        }
        if (prior && settings->extrinsic)
            t.llr -= turn * prior[k];
        t.llr *= turn;
        t.moves += all_priors;
        truth[k] = t;
    }
}

/* ---- Tests */

/* Error in units of E: |llr - true| / (u (1 + |true| + moves)). */
static double error_units(enum type type, double llr, const struct truth *t)
{
    const double unit = type == F64 ? 0x1p-53 : 0x1p-24;
    const double e = fabs(llr - t->llr) / (unit * (1 + fabs(t->llr) + t->moves));
    return e <= DBL_MAX ? e : HUGE_VAL;
}

static const struct shape shapes[] = {{1, 0, 0}, {SYMBOLS, 0, 0}, {SYMBOLS, 1, 1}, {1, SYMBOLS, 0},
                                      {SYMBOLS, SYMBOLS, 1}, {SYMBOLS, 0, 1}};
enum { N_SHAPES = sizeof shapes / sizeof *shapes };

static int has_rule(int rule) { return rule != PDM_LINEAR || pdm_plan_family(plan) == PDM_FOLD; }

/* Every rule against its definition.  In float64 the definition, computed in
 * the same type, has roundings of its own: the bound there is twice as wide. */
static void check_llrs(enum type type, const pdm_settings *settings, struct shape shape,
                       const union output *out)
{
    static const double one[2] = {1, 0};
    const double largest = type == F64 ? DBL_MAX : FLT_MAX;
    for (size_t i = 0; i < batch.n; i++) {
        struct truth truth[MOST_BITS];
        const double *y = batch.y + 2 * i, n0 = batch.n0[shape.n0 == 1 ? 0 : i];
        const double *h = shape.gain ? batch.h + (shape.gain == 1 ? 0 : 2 * i) : one;
        const double *prior = shape.prior ? batch.prior + i * (size_t)set.bits : NULL;
        define(settings, y, n0, h, prior, truth);
        for (int k = 0; k < set.bits; k++) {
            const double llr = value(type, out, i * (size_t)set.bits + (size_t)k);
            const double e = fabs(truth[k].llr) > largest
                                 ? (llr == copysign(largest, truth[k].llr) ? 0 : HUGE_VAL)
                                 : error_units(type, llr, &truth[k]);
            CHECK(e <= (type == F64 ? 8 : 4),
                  "rule %d %s: y = %.17g %+.17gi, N0 = %.17g, h = %.17g %+.17gi, bit %d: got %.17g, "
                  "wanted %.17g, E = %.3g", settings->rule, type_name[type], y[0], y[1], n0, h[0], h[1], k,
                  llr, truth[k].llr, e);
        }
    }
}

static void test_definition(void)
{
    static union output out;
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= F64; type++)
            for (size_t c = 0; c < N_SHAPES; c++) {
                const size_t n = set.order > 256 ? 12 : 48;
                struct shape shape = shapes[c];
                shape.n0 = shape.n0 == SYMBOLS ? n : shape.n0;
                shape.gain = shape.gain == SYMBOLS ? n : shape.gain;
                const pdm_settings settings = {
                    .rule = rule, .extrinsic = c & 1, .positive_bit = c >> 1 & 1};
                fill_batch(type, n);
                demap_batch(type, &settings, shape, &out);
                check_llrs(type, &settings, shape, &out);
            }
}

/* N0 so small that LLRs leave float32: the largest finite value of their sign. */
static void test_saturation(void)
{
    static union output out;
    for (int rule = PDM_EXACT; has_rule(rule) && rule <= PDM_LINEAR; rule++) {
        const pdm_settings settings = {.rule = rule};
        fill_batch(F32, 12);
        for (size_t i = 0; i < 12; i++) {
            batch.n0[i] = i % 2 ? 1e-34 : 1e-32;
            batch.y[2 * i] *= i % 3 ? 1 : 1e5;
        }
        settle(F32);
        demap_batch(F32, &settings, (struct shape){12, 0, 0}, &out);
        check_llrs(F32, &settings, (struct shape){12, 0, 0}, &out);
    }
}

static void test_slicing(void)
{
    static const double one[2] = {1, 0};
    static const size_t gains[] = {0, 1, 48};
    uint16_t label[SYMBOLS];
    for (enum type type = F32; type <= F64; type++)
        for (size_t c = 0; c < 3; c++) {
            const size_t gain = gains[c];
            fill_batch(type, 48);
            const int status =
                type == F64 ? pdm_slice_f64(plan, 48, batch.y, gain ? batch.h : NULL, gain, label)
                            : pdm_slice_f32(plan, 48, batch.y_f, gain ? batch.h_f : NULL, gain, label);
            CHECK(status == PDM_OK, "%s", pdm_status_text(status));
            for (size_t i = 0; i < 48; i++) {
                const double *y = batch.y + 2 * i, *h = gain ? batch.h + (gain == 1 ? 0 : 2 * i) : one;
                const uint32_t wanted = set.label[nearest(y, h)];
                CHECK(label[i] == wanted, "%s: y = %.17g %+.17gi, h = %.17g %+.17gi: got %u, wanted %u",
                      type_name[type], y[0], y[1], h[0], h[1], (unsigned)label[i], (unsigned)wanted);
            }
        }
    /* no decision: label 0 */
    const float y[10] = {NAN, 1, 1, NAN, INFINITY, 1, 1, -INFINITY, 1, 1};
    const float h[10] = {1, 0, 1, 0, 1, 0, 1, 0, 0, 0}, h_bad[2] = {NAN, 1};
    pdm_slice_f32(plan, 5, y, h, 5, label);
    for (size_t i = 0; i < 5; i++)
        CHECK(label[i] == 0, "symbol %u: got %u", (unsigned)i, (unsigned)label[i]);
    pdm_slice_f32(plan, 1, y + 8, h_bad, 1, label);
    CHECK(label[0] == 0, "h not a number: got %u", (unsigned)label[0]);
}

/* The word of a float32 LLR by its definition. */
static int word_of(float llr, double step, int bits)
{
    const double limit = (1 << (bits - 1)) - 1;
    const float counts = llr / (float)step;
    const double rounded = rint((double)counts);
    return (int)(rounded > limit ? limit : rounded < -limit ? -limit : rounded);
}

/* Words against the float32 LLRs of the same input.  Every second symbol has
 * gain 0: its LLRs are the priors, and so take any value one likes. */
static void test_words(void)
{
    static union output llr, out;
    static const double steps[] = {1, 0.25, 3, 0.1, 1e-30, 0x1p-126, 0x1p127};
    for (int bits = 2; bits <= 16; bits++)
        for (size_t s = 0; s < sizeof steps / sizeof *steps; s++) {
            const int limit = (1 << (bits - 1)) - 1;
            const pdm_settings settings = {.rule = PDM_MAX_LOG, .word_bits = bits, .word_step = steps[s]};
            const struct shape shape = {SYMBOLS, SYMBOLS, 1};
            fill_batch(F32, SYMBOLS);
            for (size_t i = 0; i < SYMBOLS; i += 2)
                batch.h[2 * i] = batch.h[2 * i + 1] = 0;
            for (size_t i = 0; i < SYMBOLS * (size_t)set.bits; i++) {
                /* half counts, every second one a tie; around the rails; far beyond them */
                const double halves = (double)i - SYMBOLS;
                const double counts = i % 3 == 0 ? halves / 2
                                    : i % 3 == 1 ? copysign(limit, halves) + (double)(i % 7) / 2 - 1.5
                                                 : halves * 1e9;
                const double prior = counts * steps[s];
                batch.prior[i] = fabs(prior) < 0x1p99 ? prior : copysign(0x1p99, prior);
            }
            settle(F32);
            demap_batch(F32, &settings, shape, &llr);
            for (enum type type = bits <= 8 ? I8 : I16; type <= I16; type++) {
                demap_batch(type, &settings, shape, &out);
                for (size_t i = 0; i < SYMBOLS * (size_t)set.bits; i++) {
                    const int wanted = word_of(llr.f[i], steps[s], bits);
                    CHECK(value(type, &out, i) == wanted, "%d bits, step %g, %s: llr %.9g: got %g, wanted %d",
                          bits, steps[s], type_name[type], (double)llr.f[i], value(type, &out, i), wanted);
                }
            }
        }
}

/* Ties, signs and rails with the values written out: LLR = prior, step 1. */
static void test_word_values(void)
{
    static const struct { float llr; int word_of_4_bits; } values[] = {
        {0.49f, 0},  {0.5f, 0},   {1.5f, 2},   {2.5f, 2},   {3.5f, 4},   {-0.5f, 0},    {-0.51f, -1},
        {-1.5f, -2}, {-2.5f, -2}, {6.5f, 6},   {6.51f, 7},  {7.5f, 7},   {8, 7},        {1e30f, 7},
        {-6.5f, -6}, {-7.49f, -7}, {-7.5f, -7}, {-8, -7},   {-1e30f, -7}, {-0.f, 0},    {INFINITY, 7},
        {-INFINITY, -7},
    };
    const pdm_settings settings = {.word_bits = 4, .word_step = 1};
    const float y[2] = {1, 1}, h[2] = {0, 0}, n0 = 1;
    for (size_t i = 0; i < sizeof values / sizeof *values; i++)
        for (enum type type = I8; type <= I16; type++) {
            float prior[MOST_BITS] = {0};
            union output out;
            const size_t last = (size_t)set.bits - 1;
            prior[last] = values[i].llr;
            demap(type, plan, &settings, 1, (struct input){y, &n0, h, prior}, (struct shape){1, 1, 1}, &out, NULL);
            CHECK(value(type, &out, last) == values[i].word_of_4_bits, "llr %.9g: got %g, wanted %d",
                  (double)values[i].llr, value(type, &out, last), values[i].word_of_4_bits);
        }
}

/* One bad value among good ones: NaN (in words 0) for its symbol, and not a
 * bit of difference in any other. */
static void test_not_finite(void)
{
    enum { N = 41, AT = 19 };
    static const struct { enum { Y, GAIN, PRIOR } array; double value; } bad[] = {
        {Y, NAN}, {Y, INFINITY}, {Y, -INFINITY}, {GAIN, NAN}, {GAIN, INFINITY}, {GAIN, -INFINITY}, {PRIOR, NAN},
    };
    static union output clean, dirty;
    const size_t bits = (size_t)set.bits;
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= I16; type++)
            for (size_t c = 0; c < 2 * sizeof bad / sizeof *bad; c++) {
                const size_t array = bad[c / 2].array, second = c & 1;
                const pdm_settings settings = {.rule = rule, .word_bits = 8, .word_step = 0.5};
                const struct shape shape = {N, array == GAIN ? N : 0, array == PRIOR};
                double *const bad_value = array == PRIOR  ? &batch.prior[AT * bits + second * (bits - 1)]
                                        : array == GAIN ? &batch.h[2 * AT + second]
                                                        : &batch.y[2 * AT + second];
                memset(&clean, 0, sizeof clean);
                memset(&dirty, 0, sizeof dirty);
                fill_batch(type, N);
                demap_batch(type, &settings, shape, &clean);
                *bad_value = bad[c / 2].value;
                settle(type);
                demap_batch(type, &settings, shape, &dirty);
                for (size_t i = AT * bits; i < (AT + 1) * bits; i++)
                    CHECK(type <= F64 ? isnan(value(type, &dirty, i)) : value(type, &dirty, i) == 0,
                          "rule %d %s, case %u: got %g", rule, type_name[type], (unsigned)c,
                          value(type, &dirty, i));
                memset((char *)&clean + AT * bits * type_size[type], 0, bits * type_size[type]);
                memset((char *)&dirty + AT * bits * type_size[type], 0, bits * type_size[type]);
                CHECK(memcmp(&clean, &dirty, sizeof clean) == 0, "rule %d %s, case %u: a neighbour changed",
                      rule, type_name[type], (unsigned)c);
            }
}

/* Gain 0: the prior comes back as it was (held to 2^99, in float64 2^900), or 0. */
static void test_silence(void)
{
    static union output out;
    const size_t count = 48 * (size_t)set.bits;
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= F64; type++)
            for (int c = 0; c < 8; c++) {
                const int prior = c & 1, extrinsic = c >> 1 & 1;
                const pdm_settings settings = {.rule = rule, .extrinsic = extrinsic, .positive_bit = c >> 2};
                fill_batch(type, 48);
                batch.prior[3] = INFINITY;
                batch.prior[count - 1] = -INFINITY;
                for (size_t i = 0; i < 96; i++)
                    batch.h[i] = i % 4 ? 0 : -0.;
                settle(type);
                demap_batch(type, &settings, (struct shape){48, 48, prior}, &out);
                for (size_t i = 0; i < count; i++) {
                    const double most = type == F64 ? 0x1p900 : 0x1p99;
                    const double p = larger(-most, -larger(-most, -batch.prior[i]));
                    const double wanted = prior && !extrinsic ? p : 0;
                    CHECK(value(type, &out, i) == wanted, "rule %d %s prior %g: got %.17g, wanted %.17g", rule,
                          type_name[type], batch.prior[i], value(type, &out, i), wanted);
                }
            }
}

/* Finite input, however extreme, gives finite LLRs. */
static void test_extremes(void)
{
    static union output out;
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= F64; type++) {
            const double most = type == F64 ? DBL_MAX : FLT_MAX;
            const double least = type == F64 ? 0x1p-1074 : 0x1p-149;
            const double normal = type == F64 ? DBL_MIN : FLT_MIN;
            const double sizes[] = {0, least, normal, 1e-20, 1, 1e20, most / 2, most};
            for (size_t c = 0; c < 2 * N_SHAPES; c++) {
                struct shape shape = shapes[c % N_SHAPES];
                shape.gain = shape.gain > 1 ? SYMBOLS : shape.gain;
                const pdm_settings settings = {.rule = rule, .extrinsic = c >= N_SHAPES};
                fill_batch(type, SYMBOLS);
                for (size_t i = 0; i < SYMBOLS; i++) {
                    batch.n0[i] = sizes[1 + draw_below(7)];
                    for (size_t j = 2 * i; j < 2 * i + 2; j++) {
                        batch.y[j] = plus_or_minus(sizes[(i + j) % 8]);
                        batch.h[j] = plus_or_minus(sizes[draw_below(8)]);
                    }
                    for (size_t j = i % 3; j < (size_t)set.bits; j += 3)
                        batch.prior[i * (size_t)set.bits + j] = plus_or_minus(sizes[draw_below(8)]);
                }
                settle(type);
                demap_batch(type, &settings, shape, &out);
                for (size_t i = 0; i < SYMBOLS * (size_t)set.bits; i++) {
                    const size_t s = i / (size_t)set.bits;
                    CHECK(fabs(value(type, &out, i)) <= most,
                          "rule %d %s, case %u: y = %g %+gi, N0 = %g, h = %g %+gi, prior %g: got %g", rule,
                          type_name[type], (unsigned)c, batch.y[2 * s], batch.y[2 * s + 1], batch.n0[s],
                          batch.h[2 * s], batch.h[2 * s + 1], batch.prior[i], value(type, &out, i));
                }
            }
        }
}

/* Every length around the blocks, starting anywhere: the same bytes as in a
 * long run, and none outside.  The arrays have just the size they need, so
 * that a sanitizer sees any step beyond; in float32 they start at any multiple
 * of 4 bytes, in float64 of 8. */
static void test_tails(void)
{
    static union output whole;
    const size_t bits = (size_t)set.bits;
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= I16; type++) {
            const pdm_settings settings = {.rule = rule, .word_bits = 8, .word_step = 0.25};
            fill_batch(type, SYMBOLS);
            demap_batch(type, &settings, (struct shape){SYMBOLS, SYMBOLS, 1}, &whole);
            for (size_t n = 0; n <= 70; n++) {
                const size_t first = draw_below(SYMBOLS - n), shift = draw_below(16);
                const size_t real = type == F64 ? sizeof(double) : sizeof(float), one = type_size[type];
                const struct input in = batch_input(type);
                const struct { const void *from; size_t step; } from[4] = {
                    {in.y, 2}, {in.n0, 1}, {in.h, 2}, {in.prior, bits}};
                char *copy[4];
                for (size_t a = 0; a < 4; a++) {
                    const size_t step = from[a].step * real;
                    copy[a] = malloc(shift * real + n * step + 1);
                    memcpy(copy[a] + shift * real, (const char *)from[a].from + first * step, n * step);
                }
                const size_t guard = 64 * one, nbytes = n * bits * one;
                char *out = malloc(2 * guard + shift * one + nbytes);
                char *start = out + guard + shift * one;
                memset(out, 0x5a, 2 * guard + shift * one + nbytes);
                const struct input part = {copy[0] + shift * real, copy[1] + shift * real,
                                           copy[2] + shift * real, copy[3] + shift * real};
                const int status = demap(type, plan, &settings, n, part, (struct shape){n, n, 1}, start, NULL);
                CHECK(status == PDM_OK, "%u symbols: %s", (unsigned)n, pdm_status_text(status));
                CHECK(memcmp(start, (char *)&whole + first * bits * one, nbytes) == 0,
                      "rule %d %s: %u symbols from %u differ", rule, type_name[type], (unsigned)n, (unsigned)first);
                memset(start, 0x5a, nbytes);
                for (char *p = out + 1; p < start + nbytes + guard; p++)
                    if (*p != *out || *out != 0x5a)
                        failed(__LINE__, "guards untouched", "rule %d %s: %u symbols: wrote at %d", rule,
                               type_name[type], (unsigned)n, (int)(p - start));
                for (size_t a = 0; a < 4; a++)
                    free(copy[a]);
                free(out);
            }
        }
}

/* The finished plan moved elsewhere, only the bytes that it needs; and the
 * LLRs written over the prior. */
static void test_copies(void)
{
    static union output wanted, got;
    const size_t used = pdm_plan_used(plan);
    void *memory = malloc(used);
    memcpy(memory, plan, used);
    for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
        for (enum type type = F32; has_rule(rule) && type <= F64; type++) {
            const pdm_settings settings = {.rule = rule, .extrinsic = 1};
            const size_t nbytes = SYMBOLS * (size_t)set.bits * type_size[type];
            const struct shape shape = {SYMBOLS, SYMBOLS, 1};
            fill_batch(type, SYMBOLS);
            demap_batch(type, &settings, shape, &wanted);
            demap(type, memory, &settings, SYMBOLS, batch_input(type), shape, &got, NULL);
            CHECK(memcmp(&got, &wanted, nbytes) == 0, "rule %d %s: a copied plan differs", rule, type_name[type]);
            struct input in = batch_input(type);
            memcpy(&got, in.prior, nbytes);
            in.prior = &got;
            demap(type, plan, &settings, SYMBOLS, in, shape, &got, NULL);
            CHECK(memcmp(&got, &wanted, nbytes) == 0, "rule %d %s: differs in place", rule, type_name[type]);
        }
    free(memory);
}

/* ---- Refusals */

enum { NOWHERE = 12345 };
static size_t where = NOWHERE;

/* The call that gave the status was also given &where. */
static void check_refused(int line, int status, int wanted, size_t wanted_where)
{
    checks++;
    if (status != wanted || where != wanted_where)
        failed(line, "refused", "got status %d at %d, wanted %d at %d", status, (int)where, wanted,
               (int)wanted_where);
    where = NOWHERE;
}

static void test_plan_refusals(void)
{
#define REFUSED(wanted, at, ...) \
    do { \
        check_refused(__LINE__, pdm_plan_init(__VA_ARGS__, &where), wanted, at); \
        CHECK(pdm_plan_used(plan) == 0 && pdm_plan_order(plan) == 0 && pdm_plan_bits(plan) == 0 && \
                  pdm_plan_family(plan) == -1 && pdm_plan_boxes(plan) == 0, "still a plan"); \
        prepare(&made[2]); \
    } while (0)
#define SET set.iq, set.label, set.order
    const size_t size = sizeof plan_memory;
    prepare(&made[2]);
    check_refused(__LINE__, pdm_plan_init(NULL, size, SET, &where), PDM_BAD_ARGUMENT, NOWHERE);
    check_refused(__LINE__, pdm_plan_init(plan, size, NULL, set.label, 16, &where), PDM_BAD_ARGUMENT, NOWHERE);
    check_refused(__LINE__, pdm_plan_init(plan, size, set.iq, NULL, 16, &where), PDM_BAD_ARGUMENT, NOWHERE);
    prepare(&made[2]);
    static const size_t orders[] = {0, 1, 3, 15, 17, 131072, (size_t)1 << 31, SIZE_MAX};
    for (size_t i = 0; i < sizeof orders / sizeof *orders; i++)
        REFUSED(PDM_BAD_ORDER, NOWHERE, plan, size, set.iq, set.label, orders[i]);
    REFUSED(PDM_BAD_SPACE, NOWHERE, plan, PDM_PLAN_BYTES(16) - 1, SET);
    check_refused(__LINE__, pdm_plan_init(plan, 0, SET, &where), PDM_BAD_SPACE, NOWHERE);
    check_refused(__LINE__, pdm_plan_init(plan, PDM_PLAN_BYTES(16), SET, &where), PDM_OK, NOWHERE);
    static const double bad[] = {NAN, INFINITY, -INFINITY};
    for (size_t i = 0; i < 3; i++) {
        set.iq[2 * 11 + i % 2] = bad[i];
        REFUSED(PDM_BAD_POINT, 11, plan, size, SET);
    }
    set.iq[2 * 5] = set.iq[2 * 14];
    set.iq[2 * 5 + 1] = set.iq[2 * 14 + 1];
    REFUSED(PDM_BAD_POINT, 14, plan, size, SET);
    set.iq[2 * 9] = -0.;
    set.iq[2 * 3] = 0.;
    set.iq[2 * 9 + 1] = set.iq[2 * 3 + 1] = 1;
    REFUSED(PDM_BAD_POINT, 9, plan, size, SET);
    set.label[7] = 16;
    REFUSED(PDM_BAD_LABEL, 7, plan, size, SET);
    set.label[7] = UINT32_MAX;
    REFUSED(PDM_BAD_LABEL, 7, plan, size, SET);
    set.label[12] = set.label[4];
    REFUSED(PDM_BAD_LABEL, 12, plan, size, SET);
    set.label[12] = set.label[4];
    CHECK(init_plan(NULL) == PDM_BAD_LABEL, "without where");
    CHECK(pdm_plan_used(NULL) == 0 && pdm_plan_family(NULL) == -1, "NULL is no plan");
#undef SET
#undef REFUSED
}

/* A call that is refused writes nothing. */
static void test_call_refusals(void)
{
    static union output out, before;
    const pdm_settings good = {.rule = PDM_MAX_LOG, .word_bits = 6, .word_step = 0.5};
    memset(&before, 0x5a, sizeof before);
    memcpy(&out, &before, sizeof out);
    for (enum type type = F32; type <= I16; type++) {
#define REFUSED(wanted, at, ...) \
    do { \
        check_refused(__LINE__, demap(type, __VA_ARGS__, &where), wanted, at); \
        CHECK(memcmp(&out, &before, sizeof out) == 0, "%s: wrote", type_name[type]); \
        memcpy(&out, &before, sizeof out); \
    } while (0)
        static const double noises[] = {0, -0., -1, NAN, INFINITY, -INFINITY};
        const struct shape all = {SYMBOLS, SYMBOLS, 1};
        prepare(&made[2]);
        fill_batch(type, SYMBOLS);
        const struct input in = batch_input(type);
        struct input lacking = in;
        lacking.y = NULL;
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, lacking, all, &out);
        lacking = in;
        lacking.n0 = NULL;
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, lacking, all, &out);
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, in, all, NULL);
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, NULL, SYMBOLS, in, all, &out);
        REFUSED(PDM_BAD_PLAN, NOWHERE, NULL, &good, SYMBOLS, in, all, &out);
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, in, ((struct shape){0, 0, 0}), &out);
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, in, ((struct shape){SYMBOLS - 1, 0, 0}), &out);
        REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &good, SYMBOLS, in, ((struct shape){1, SYMBOLS - 1, 0}), &out);
        for (size_t i = 0; i < sizeof noises / sizeof *noises; i++) {
            const size_t at = i ? SYMBOLS - i : 0;
            fill_batch(type, SYMBOLS);
            batch.n0[at] = noises[i];
            batch.n0[SYMBOLS - 1] = -1;
            settle(type);
            REFUSED(PDM_BAD_NOISE, at, plan, &good, SYMBOLS, in, all, &out);
            batch.n0[0] = noises[i];
            settle(type);
            REFUSED(PDM_BAD_NOISE, 0, plan, &good, SYMBOLS, in, ((struct shape){1, 0, 0}), &out);
            CHECK(demap(type, plan, &good, SYMBOLS, in, all, &out, NULL) == PDM_BAD_NOISE, "without where");
        }
        fill_batch(type, SYMBOLS);
        static const pdm_settings odd[] = {{.extrinsic = 2}, {.extrinsic = -1}, {.positive_bit = 2}, {.positive_bit = -1}};
        for (size_t i = 0; i < sizeof odd / sizeof *odd; i++) {
            pdm_settings s = odd[i];
            s.word_bits = 6;
            s.word_step = 1;
            REFUSED(PDM_BAD_ARGUMENT, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
        }
        pdm_settings s = good;
        s.rule = 3;
        REFUSED(PDM_BAD_RULE, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
        s.rule = -1;
        REFUSED(PDM_BAD_RULE, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
        if (type >= I8) {
            const int bits[] = {-1, 0, 1, type == I8 ? 9 : 17};
            const double steps[] = {0, -0.5, NAN, INFINITY, 1e-300, 1e300};
            for (size_t i = 0; i < 4; i++) {
                s = good;
                s.word_bits = bits[i];
                REFUSED(PDM_BAD_WORD, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
            }
            for (size_t i = 0; i < 6; i++) {
                s = good;
                s.word_step = steps[i];
                REFUSED(PDM_BAD_WORD, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
            }
        }
        s = good;
        s.rule = PDM_LINEAR;
        prepare(&made[10]);     /* a cross is no Gray grid */
        REFUSED(PDM_BAD_RULE, NOWHERE, plan, &s, SYMBOLS, in, all, &out);
        const struct input nothing = {NULL, NULL, NULL, NULL};
        CHECK(demap(type, plan, &good, 0, nothing, (struct shape){0, 0, 0}, NULL, NULL) == PDM_OK, "no symbols");
        memset(plan_memory, 0, sizeof plan_memory);
        REFUSED(PDM_BAD_PLAN, NOWHERE, plan, &good, SYMBOLS, in, all, &out);
#undef REFUSED
    }
    uint16_t label[1] = {77};
    const float y[2] = {1, 1};
    CHECK(pdm_slice_f32(plan, 1, y, NULL, 0, label) == PDM_BAD_PLAN && label[0] == 77, "wrote %u", label[0]);
    prepare(&made[2]);
    CHECK(pdm_slice_f32(plan, 1, NULL, NULL, 0, label) == PDM_BAD_ARGUMENT && label[0] == 77, "wrote %u", label[0]);
    CHECK(pdm_slice_f32(plan, 1, y, NULL, 0, NULL) == PDM_BAD_ARGUMENT, "no output");
    CHECK(pdm_slice_f32(plan, 1, y, y, 2, label) == PDM_BAD_ARGUMENT && label[0] == 77, "wrote %u", label[0]);
    CHECK(pdm_slice_f64(plan, 0, NULL, NULL, 0, NULL) == PDM_OK, "no symbols");
}

static void test_texts_and_levels(void)
{
    for (int i = PDM_OK; i <= PDM_BAD_ISA; i++)
        for (int j = PDM_OK; j <= PDM_BAD_ISA + 1; j++)
            CHECK((strcmp(pdm_status_text(i), pdm_status_text(j)) == 0) == (i == j), "%d and %d", i, j);
    CHECK(strlen(pdm_status_text(-1)) > 0, "a text for every number");
    CHECK(strcmp(pdm_version(), PYDEMAP_VERSION) == 0, "%s", pdm_version());
    size_t count = 0;
    while (pdm_available_isa(count))
        count++;
    CHECK(count >= 1 && strcmp(pdm_available_isa(count - 1), "baseline") == 0, "%u levels", (unsigned)count);
    CHECK(pdm_available_isa(count + 1) == NULL && pdm_available_isa(SIZE_MAX) == NULL, "past the last");
    CHECK(strcmp(pdm_isa(), pdm_available_isa(0)) == 0, "starts at %s", pdm_isa());
    CHECK(pdm_use_isa("baseline") == PDM_OK && strcmp(pdm_isa(), "baseline") == 0, "%s", pdm_isa());
    static const char *const unknown[] = {"v5", "v", "baselin", "baseline ", "", "V3"};
    for (size_t i = 0; i < sizeof unknown / sizeof *unknown; i++)
        CHECK(pdm_use_isa(unknown[i]) == PDM_BAD_ISA && strcmp(pdm_isa(), "baseline") == 0, "%s", unknown[i]);
    CHECK(pdm_use_isa("auto") == PDM_OK && strcmp(pdm_isa(), pdm_available_isa(0)) == 0, "%s", pdm_isa());
    CHECK(pdm_use_isa(NULL) == PDM_OK && strcmp(pdm_isa(), pdm_available_isa(0)) == 0, "%s", pdm_isa());
}

static void test_recognition(void)
{
    for (size_t c = 0; c < N_MADE; c++) {
        const struct made *m = &made[c];
        prepare(m);
        CHECK(pdm_plan_order(plan) == set.order, "%s: %u", m->name, (unsigned)pdm_plan_order(plan));
        CHECK(pdm_plan_bits(plan) == set.bits, "%s: %d", m->name, pdm_plan_bits(plan));
        CHECK(pdm_plan_family(plan) == m->family, "%s: got %d, wanted %d", m->name, pdm_plan_family(plan),
              m->family);
        CHECK(pdm_plan_boxes(plan) == m->boxes, "%s: got %d, wanted %d", m->name, pdm_plan_boxes(plan),
              m->boxes);
        CHECK(pdm_plan_used(plan) > 0 && pdm_plan_used(plan) <= PDM_PLAN_BYTES(set.order), "%s: %u", m->name,
              (unsigned)pdm_plan_used(plan));
    }
    /* the largest order, in memory of just the promised size */
    const size_t order = 65536;
    double *iq = malloc(2 * order * sizeof *iq);
    uint32_t *label = malloc(order * sizeof *label);
    pdm_plan *large = malloc(PDM_PLAN_BYTES(order));
    for (size_t i = 0; i < order; i++) {
        iq[2 * i] = 2. * (double)(i / 256) - 255;
        iq[2 * i + 1] = 2. * (double)(i % 256) - 255;
        label[i] = gray(i / 256) << 8 | gray(i % 256);
    }
    CHECK(pdm_plan_init(large, PDM_PLAN_BYTES(order), iq, label, order, NULL) == PDM_OK, "order 65536");
    CHECK(pdm_plan_family(large) == PDM_FOLD && pdm_plan_bits(large) == 16, "order 65536: family %d, %d bits",
          pdm_plan_family(large), pdm_plan_bits(large));
    free(iq);
    free(label);
    free(large);
}

/* ---- Equal bits everywhere */

static uint64_t hash;

static void add_to_hash(uint64_t bits, int nbytes)
{
    for (int i = 0; i < nbytes; i++)
        hash = (hash ^ (bits >> 8 * i & 255)) * UINT64_C(0x100000001b3);
}

static uint64_t output_hash(void)
{
    static union output out;
    hash = UINT64_C(0xcbf29ce484222325);
    for (size_t m = 0; m < N_MADE; m++) {
        prepare(&made[m]);
        for (int rule = PDM_EXACT; rule <= PDM_LINEAR; rule++)
            for (enum type type = F32; has_rule(rule) && type <= I16; type++)
                for (size_t c = 0; c < N_SHAPES; c++) {
                    const pdm_settings settings = {.rule = rule, .extrinsic = c & 1, .positive_bit = c >> 1 & 1,
                                                   .word_bits = type == I8 ? 6 : 12, .word_step = 0.375};
                    fill_batch(type, SYMBOLS);
                    demap_batch(type, &settings, shapes[c], &out);
                    for (size_t i = 0; i < SYMBOLS * (size_t)set.bits; i++) {
                        uint32_t f;
                        uint64_t d;
                        memcpy(&f, &out.f[i], sizeof f);
                        memcpy(&d, &out.d[i], sizeof d);
                        add_to_hash(type == F32   ? f
                                    : type == F64 ? d
                                    : type == I8  ? (uint8_t)out.i8[i]
                                                  : (uint16_t)out.i16[i],
                                    (int)type_size[type]);
                    }
                }
    }
    return hash;
}

int main(int argc, char **argv)
{
    const int hash_only = argc > 1 && strcmp(argv[1], "--hash") == 0;
    if (!hash_only) {
        test_texts_and_levels();
        test_recognition();
        test_plan_refusals();
        test_call_refusals();
    }
    for (size_t level = 0; pdm_available_isa(level); level++) {
        CHECK(pdm_use_isa(pdm_available_isa(level)) == PDM_OK, "%s", pdm_available_isa(level));
        for (size_t m = 0; !hash_only && m < N_MADE; m++) {
            char text[80];
            if (made[m].columns * made[m].rows > TEST_UP_TO)
                continue;
            snprintf(text, sizeof text, "%s, %s", made[m].name, pdm_isa());
            context = text;
            prepare(&made[m]);
            test_definition();
            test_saturation();
            test_slicing();
            test_words();
            test_word_values();
            test_not_finite();
            test_silence();
            test_extremes();
            test_tails();
            test_copies();
            context = "";
        }
        const uint64_t got = output_hash();
        printf("hash at %s: 0x%08lx%08lx\n", pdm_isa(), (unsigned long)(got >> 32),
               (unsigned long)(got & 0xffffffff));
        CHECK(hash_only || got == wanted_hash, "hash at %s", pdm_isa());
    }
    printf("%ld checks passed, %ld failed\n", checks - failures, failures);
    return failures != 0;
}

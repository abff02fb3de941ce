/* pydemap: soft-output QAM demapping, the public contract of the C library.
 *
 * C99, freestanding: no heap, no stdio, no libm, nothing from outside this
 * library is called.  The caller owns every byte.  The only state kept between
 * calls is the instruction-set level (pdm_use_isa), which never changes a
 * result: every level, compiler and machine gives the same bits.
 *
 * SPDX-License-Identifier: MIT
 *
 * Conventions, everywhere
 *   received sample  y = h s + w, w circular complex Gaussian
 *   noise variance   N0 = E|w|^2, the total over both dimensions, in the units
 *                    of |y|^2; finite and > 0
 *   gain             h, complex, known; 1 where no gain is passed
 *   label            n bits a point, M = 2^n points; b0 is the label's most
 *                    significant bit and the first on the line
 *   LLR of bit k     ln P(b_k = 0 | y) - ln P(b_k = 1 | y): positive means 0
 *   complex arrays   real and imaginary part in turn ("_iq"), 2 numbers a sample
 *   LLR arrays       n numbers a symbol, b0 first, symbols one after another
 */
#ifndef PYDEMAP_H
#define PYDEMAP_H

#include <stddef.h>
#include <stdint.h>

#define PYDEMAP_VERSION "0.1.0"

#ifdef __cplusplus
extern "C" {
#endif

/* A plan for M points takes PDM_PLAN_BYTES(M) bytes, aligned as a double:
 *     static double memory[PDM_PLAN_BYTES(64) / sizeof(double)];
 * pdm_plan_used() tells how few of them the finished plan needs. */
#define PDM_PLAN_BYTES(order) ((size_t)768 + (size_t)16 * (size_t)(order))

/* The lines between the two marks are also what Python's cffi reads. */
/* cffi: begin */

/* What a labelled point set was recognised as.  Opaque, holds no pointers:
 * its first pdm_plan_used() bytes may be copied anywhere that is aligned as a
 * double, into flash included. */
typedef struct pdm_plan pdm_plan;

enum pdm_status {
    PDM_OK = 0,
    PDM_BAD_ARGUMENT = 1,   /* a pointer is NULL or misaligned, or a count fits nothing */
    PDM_BAD_ORDER = 2,      /* not a power of two from 2 to 65536 */
    PDM_BAD_POINT = 3,      /* a point is not finite, lies on another, or the
                               largest is not within 2^-100 .. 2^100 */
    PDM_BAD_LABEL = 4,      /* labels are not 0 .. M-1, each once */
    PDM_BAD_SPACE = 5,      /* the memory given for a plan is too small */
    PDM_BAD_PLAN = 6,       /* the memory holds no finished plan */
    PDM_BAD_RULE = 7,       /* unknown, or not available for this plan */
    PDM_BAD_NOISE = 8,      /* an N0 is not finite and > 0 */
    PDM_BAD_WORD = 9,       /* word size or step out of range */
    PDM_BAD_ISA = 10        /* no such instruction-set level on this machine */
};

enum pdm_rule {
    PDM_EXACT = 0,          /* sums over all points */
    PDM_MAX_LOG = 1,        /* each sum replaced by its largest term */
    PDM_LINEAR = 2          /* fold plans: distance to the bit's nearest
                               threshold times 4 a / N0, a the half-spacing */
};

enum pdm_family {
    PDM_FOLD = 0,           /* one grid, Gray on each axis */
    PDM_BOXES = 1,          /* a grid that splits into a few products of axes */
    PDM_POINTS = 2          /* any labelled points */
};

/* How the LLRs are to be formed.  All-zero: exact, a posteriori, positive
 * means 0. */
typedef struct pdm_settings {
    int rule;               /* enum pdm_rule */
    int extrinsic;          /* 1: the prior is taken off the result again */
    int positive_bit;       /* the bit value that a positive LLR (and a
                               positive prior) stands for: 0 or 1 */
    int word_bits;          /* words only: 2 .. 8 for int8, 2 .. 16 for int16 */
    double word_step;       /* words only: LLR per count, 2^-126 .. 2^127 */
} pdm_settings;

/* pdm_status_text
 * Purpose      one English line for a status; never NULL, static storage.
 * Threads      safe.  Not promised: that the wording stays. */
const char *pdm_status_text(int status);

/* pdm_version: the library's version, as in PYDEMAP_VERSION. */
const char *pdm_version(void);

/* pdm_plan_bytes: PDM_PLAN_BYTES(order), for memory sized at run time; 0 if the
 * order is not a power of two from 2 to 65536. */
size_t pdm_plan_bytes(size_t order);

/* pdm_plan_init
 * Purpose      recognise a labelled point set and write the plan for it.
 * Reads        points_iq[2 * order]: finite, no two at the same place, the
 *              largest coordinate within 2^-100 .. 2^100;
 *              labels[order]: 0 .. order-1, each once; the label of each point.
 *              order: a power of two, 2 .. 65536.
 * Writes       plan[plan_nbytes], plan_nbytes >= PDM_PLAN_BYTES(order), aligned
 *              as a double.  On failure *where (if where is not NULL) is the
 *              index of the first point or label at fault, and the memory holds
 *              no plan.
 * Ownership    nothing is kept: points_iq and labels may go afterwards.
 * Aliasing     plan must not overlap points_iq or labels.
 * Returns      PDM_OK, PDM_BAD_ARGUMENT, _ORDER, _SPACE, _POINT or _LABEL.
 * Threads      safe on different plans.
 * Not promised which family is chosen for a point set, in later versions.
 *
 * A grid is recognised where coordinates lie within 4 units in the last place
 * (of the largest) of equal steps; the LLRs are then those of the ideal grid. */
int pdm_plan_init(pdm_plan *plan, size_t plan_nbytes, const double *points_iq,
                  const uint32_t *labels, size_t order, size_t *where);

/* Facts of a finished plan; 0 (or -1 for the family) if it is not finished.
 * Thread-safe. */
size_t pdm_plan_used(const pdm_plan *plan);    /* bytes that it really needs */
size_t pdm_plan_order(const pdm_plan *plan);   /* M */
int pdm_plan_bits(const pdm_plan *plan);       /* n */
int pdm_plan_family(const pdm_plan *plan);     /* enum pdm_family */
int pdm_plan_boxes(const pdm_plan *plan);      /* number of boxes; 0: points */

/* pdm_demap_f32, _f64, _i8, _i16
 * Purpose      LLRs of n_symbols received samples.
 * Reads        plan: finished.  settings: see above.
 *              y_iq[2 * n_symbols].
 *              noise_variance[noise_count]: N0; noise_count is 1 (the same for
 *              all symbols) or n_symbols.  Every value is checked before
 *              anything is written.
 *              gain_iq[2 * gain_count]: h; gain_count is 1 or n_symbols.
 *              NULL: no gain (h = 1; gain_count is not looked at).
 *              prior[n * n_symbols]: LLRs known beforehand, of the sign that
 *              settings->positive_bit tells; NULL: none.
 * Writes       llr[n * n_symbols] (word[n * n_symbols]).  On failure nothing,
 *              but *where (if where is not NULL): the index into
 *              noise_variance of the first bad value.
 * Ownership    nothing is kept.
 * Aliasing     the output must not overlap an input, except that llr may be
 *              the same array as prior (_f32 and _f64).
 * NaN, infinity  a symbol with non-finite y or h, or with a NaN in its prior,
 *              gives NaN for all its bits; a word of 0 (an erasure).  h = 0
 *              carries no information: the LLR is the prior, or 0.  Finite input
 *              never gives NaN.  Results beyond the type's range become its
 *              largest finite value of that sign.  y / h beyond 2^107 (f64:
 *              2^1003) times the constellation's scale counts as that, a prior
 *              beyond 2^99 (2^900), infinite ones included, likewise.
 * Words        the float32 LLR divided by (float)word_step, rounded half to
 *              even, saturated at +-(2^(word_bits-1) - 1).
 * Returns      PDM_OK, PDM_BAD_ARGUMENT, _PLAN, _RULE, _NOISE or _WORD.
 * Threads      safe: a pure function of its input; any number of calls may
 *              share one plan.
 * Not promised aliasing other than above; constant time. */
int pdm_demap_f32(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const float *y_iq, const float *noise_variance, size_t noise_count,
                  const float *gain_iq, size_t gain_count, const float *prior,
                  float *llr, size_t *where);
int pdm_demap_f64(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const double *y_iq, const double *noise_variance, size_t noise_count,
                  const double *gain_iq, size_t gain_count, const double *prior,
                  double *llr, size_t *where);
int pdm_demap_i8(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                 const float *y_iq, const float *noise_variance, size_t noise_count,
                 const float *gain_iq, size_t gain_count, const float *prior,
                 int8_t *word, size_t *where);
int pdm_demap_i16(const pdm_plan *plan, const pdm_settings *settings, size_t n_symbols,
                  const float *y_iq, const float *noise_variance, size_t noise_count,
                  const float *gain_iq, size_t gain_count, const float *prior,
                  int16_t *word, size_t *where);

/* pdm_slice_f32, _f64
 * Purpose      hard decisions: the label of the point nearest to y / h.
 * Reads        y_iq, gain_iq as above.
 * Writes       label[n_symbols].  Where several points are equally near, one of
 *              them; where y or h is not finite, or h = 0: label 0.
 * Returns      PDM_OK, PDM_BAD_ARGUMENT or PDM_BAD_PLAN.
 * Aliasing, ownership, threads as above. */
int pdm_slice_f32(const pdm_plan *plan, size_t n_symbols, const float *y_iq,
                  const float *gain_iq, size_t gain_count, uint16_t *label);
int pdm_slice_f64(const pdm_plan *plan, size_t n_symbols, const double *y_iq,
                  const double *gain_iq, size_t gain_count, uint16_t *label);

/* Instruction-set levels
 * pdm_isa            name of the level in use ("baseline", "v3", "v4").
 * pdm_available_isa  name of the index-th level this machine can run, fastest
 *                    first; NULL past the last.
 * pdm_use_isa        use the named level from now on, in all threads; "auto"
 *                    or NULL: the fastest.  Returns PDM_OK or PDM_BAD_ISA (and
 *                    changes nothing).
 * Threads            safe; a call under way may finish on the level it began. */
const char *pdm_isa(void);
const char *pdm_available_isa(size_t index);
int pdm_use_isa(const char *name);

/* cffi: end */

#ifdef __cplusplus
}
#endif

#endif

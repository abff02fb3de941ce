/* All kernels, for both real types; compiled once for each instruction-set
 * level with PDM_LEVEL set to its name.  Each result depends on its own
 * symbol alone and is formed by IEEE-754 operations in a fixed order, so the
 * vector width that a level compiles to cannot change a bit.  That holds only
 * without contraction to fused multiply-add and without value-changing
 * optimisation, which the next lines check as far as a compiler tells. */
#include "kernels.h"

#include <float.h>

#ifdef __FAST_MATH__
#error "build without -ffast-math: it would change the results"
#endif
#if FLT_EVAL_METHOD != 0
#error "float and double must be evaluated in their own precision (x86: use SSE2)"
#endif

#ifndef PDM_LEVEL
#define PDM_LEVEL baseline
#endif
#define PASTE_(a, b) a##b
#define PASTE(a, b) PASTE_(a, b)
#define TEXT_(a) #a
#define TEXT(a) TEXT_(a)

/* Symbols handled together.  Enough to fill a few vectors of the widest level
 * and to hide latency; firmware sets 4 to keep the stack small.  Same bits. */
#ifndef PDM_LANES
#define PDM_LANES 32
#endif
#define EACH_LANE for (int i = 0; i < LANES; i++)

/* For functions of a number of bits that is a constant where they are called:
 * left to itself a compiler keeps one copy for all, and no vectors.  And for
 * the opposite: frames that should not all lie on the stack at once. */
#if defined(__GNUC__)
#define BY_CONSTANT static inline __attribute__((always_inline))
#define APART static __attribute__((noinline))
#else
#define BY_CONSTANT static inline
#define APART static
#endif

enum { BITS_IN_HALVES, BITS_IN_TURN, BITS_ANYHOW }; /* of a symbol, on I and Q */

union double_bits {
    double r;
    uint64_t w;
};

/* Points are taken in chunks of 2^CHUNK_BITS labels. */
#define CHUNK_BITS 6
#define MAX_HALF ((PDM_MAX_LEVELS > 1 << CHUNK_BITS ? PDM_MAX_LEVELS : 1 << CHUNK_BITS) / 2)

#define LOG2_E 1.44269504088896339
#define LOG2_E_LOW 2.0355273740931033e-17
#define NO_INFORMATION (1e308 * 10)     /* an infinite noise variance */

static inline double power_of_two(int exponent)
{
    const union double_bits b = {.w = (uint64_t)(exponent + 1023) << 52};
    return b.r;
}

#define REAL_BITS 32
#include "real.h"
#undef REAL_BITS
#define REAL_BITS 64
#include "real.h"

const struct pdm_kernels PASTE(pdm_kernels_, PDM_LEVEL) = {TEXT(PDM_LEVEL), run_f32, run_f64};

/* Template over the real type: included with REAL_BITS 32 and 64 (float and
 * double), and including the kernels in turn.  It defines
 *   real, word           the type, and the unsigned integer of its size
 *   F(name), R(number)   name with the type's suffix, number of the type
 *   LANES                symbols handled together
 * and the constants of the type below. */
#if REAL_BITS == 32
typedef float real32;
#define real real32
#define word uint32_t
#define F(name) name##_f32
#define R(number) number##f
#define LANES PDM_LANES
#define LARGEST 0x1.fffffep+127f
#define SMALLEST 0x1p-126f           /* the smallest normal number */
#define FARTHEST 0x1p+107            /* of a coordinate: times 2^18 still finite */
#define LEAST_NOISE 0x1p-100
#define FRACTION_BITS 23
#define EXPONENT_ONE 127u           /* exponent field of 1 */
#define MAGIC 0x1.8p+23f            /* x + MAGIC rounds x to a whole number, half to even */
#define MAGIC_WORD 0x4b400000u      /* MAGIC as a word: + i is MAGIC + i */
#define ZERO_WEIGHT 125             /* 2^-x counts as 0 from here: before it gets subnormal */
#define LARGEST_RATIO R(64.)        /* |ln| of two sums up to which none of them has lost terms */
#define NEGLIGIBLE R(32.)           /* 65536 terms of e^-32 are below 2^-29 */
#define PRIOR_LIMIT 0x1p+99f        /* 16 priors vanish in LARGEST */
#else
typedef double real64;
#define real real64
#define word uint64_t
#define F(name) name##_f64
#define R(number) number
#define LANES (PDM_LANES / 2)
#define LARGEST 0x1.fffffffffffffp+1023
#define SMALLEST 0x1p-1022
#define FARTHEST 0x1p+1003
#define LEAST_NOISE 0x1p-960
#define FRACTION_BITS 52
#define EXPONENT_ONE 1023u
#define MAGIC 0x1.8p+52
#define MAGIC_WORD 0x4338000000000000u
#define ZERO_WEIGHT 1020
#define LARGEST_RATIO R(650.)
#define NEGLIGIBLE R(56.)
#define PRIOR_LIMIT 0x1p+900
#endif

#include "elementary.h"
#include "block.h"
#include "fold.h"
#include "boxes.h"
#include "points.h"
#include "run.h"

#undef real
#undef word
#undef F
#undef R
#undef LANES
#undef LARGEST
#undef SMALLEST
#undef FARTHEST
#undef LEAST_NOISE
#undef FRACTION_BITS
#undef EXPONENT_ONE
#undef MAGIC
#undef MAGIC_WORD
#undef ZERO_WEIGHT
#undef LARGEST_RATIO
#undef NEGLIGIBLE
#undef PRIOR_LIMIT

/* Private.  What a labelled point set was recognised as.
 *
 * Coordinates are kept in units in which the largest is in [1/2, 1): the unit
 * is a power of two, so that changing to it rounds nothing, and no product of
 * two of the points' coordinates can overflow. */
#ifndef PDM_PLAN_H
#define PDM_PLAN_H

#include "pydemap.h"

/* Limits.  Smaller ones, the same for all files of a build, save stack in
 * firmware; a constellation beyond them is taken as points. */
#ifndef PDM_MAX_LEVELS
#define PDM_MAX_LEVELS 256  /* coordinates of an axis; a power of two */
#endif
#ifndef PDM_MAX_SLOTS
#define PDM_MAX_SLOTS 640   /* of all axes of all boxes */
#endif
enum {
    PDM_MAX_BITS = 16,
    PDM_MAX_PATTERNS = 8,   /* independent bits of an axis: 2^8 slots */
    PDM_MAX_BOXES = 4
};

/* Where a label bit is read in a box. */
struct pdm_bit {
    uint8_t axis;           /* 0: I, 1: Q, 2: the same all over the box */
    uint8_t pattern;        /* which bit of the axis's slot number */
    uint8_t invert;         /* 1: the complement of it; axis 2: the value */
};

/* A level of an axis: its number along the axis, and its slot: the values of
 * the axis's patterns, pattern 0 the most significant. */
struct pdm_level {
    uint8_t number, slot;
};

struct pdm_box {
    struct {
        uint32_t offset;    /* of its struct pdm_level array, bytes into the plan */
        uint16_t count;     /* levels; at most 2^patterns */
        uint16_t first_slot;    /* where its slots begin among those of all boxes */
        uint8_t patterns;
    } axis[2];
    struct pdm_bit bit[PDM_MAX_BITS];
};

/* Gray axis: bit at each folding depth, outermost threshold first. */
struct pdm_fold {
    uint8_t depths;
    uint8_t bit[PDM_MAX_PATTERNS];
    uint8_t negative[PDM_MAX_PATTERNS]; /* 1: beyond the threshold the bit is 1 */
};

struct pdm_plan {
    uint32_t magic, used, order;
    uint8_t bits, family, boxes;
    double unit;            /* coordinates = points * unit */
    /* grids: coordinate of level i = centre + half_spacing (2 i - levels + 1) */
    double centre[2], half_spacing[2];
    double spacing_squared[2], spacing_squared_low[2];  /* (2 half_spacing)^2, in two parts */
    uint16_t levels[2];
    struct pdm_fold fold[2];
    struct pdm_box box[PDM_MAX_BOXES];
    /* behind it: the level arrays of the boxes; for points, I of each label
     * and then Q of each label, as doubles */
};

#define PDM_MAGIC 0x50444d31u

static inline const struct pdm_level *pdm_levels(const struct pdm_plan *plan,
                                                 const struct pdm_box *box, int axis)
{
    return (const struct pdm_level *)((const unsigned char *)plan + box->axis[axis].offset);
}

static inline const double *pdm_points(const struct pdm_plan *plan)
{
    return (const double *)(plan + 1);
}

/* a b less its rounded value: the digits that a double does not hold.  Each
 * factor is split into halves whose products are exact (Dekker, Numerische
 * Mathematik 18, 1971); nothing must overflow. */
static inline double product_low(double a, double b)
{
    const double ca = 0x1.0000002p+27 * a, ah = ca - (ca - a), al = a - ah;
    const double cb = 0x1.0000002p+27 * b, bh = cb - (cb - b), bl = b - bh;
    return ((ah * bh - a * b) + ah * bl + al * bh) + al * bl;
}

#endif

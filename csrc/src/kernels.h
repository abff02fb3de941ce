/* Private.  A checked call, and what each instruction-set level does with it. */
#ifndef PDM_KERNELS_H
#define PDM_KERNELS_H

#include "plan.h"

enum pdm_output { PDM_OUT_REAL, PDM_OUT_I8, PDM_OUT_I16, PDM_OUT_LABEL };

struct pdm_call {
    const struct pdm_plan *plan;
    pdm_settings settings;
    size_t count;           /* symbols */
    const void *y;          /* all arrays of the kernel's real type */
    const void *noise;      /* NULL: slicing, where N0 does not matter */
    size_t noise_stride;    /* 0: one value for all symbols */
    const void *gain;       /* NULL: 1 */
    size_t gain_stride;
    const void *prior;      /* NULL: none */
    void *out;
    enum pdm_output output;
};

struct pdm_kernels {
    const char *name;
    void (*run_f32)(const struct pdm_call *call);
    void (*run_f64)(const struct pdm_call *call);
};

extern const struct pdm_kernels pdm_kernels_baseline, pdm_kernels_v3, pdm_kernels_v4;

#endif

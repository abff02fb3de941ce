/* Soft decisions for 64-QAM: a plan made once, then 6-bit words for a decoder.
 * No heap, no libm; printf is there only to show what comes out. */
#include "pydemap.h"

#include <stdio.h>

enum { ORDER = 64, BITS = 6, SYMBOLS = 3 };

static double plan_memory[PDM_PLAN_BYTES(ORDER) / sizeof(double)];
static pdm_plan *const plan = (pdm_plan *)plan_memory;

/* Eight levels an axis at -7, -5 .. 7 times a, Gray labels, the first three
 * bits on I; a = 1 / sqrt(42) makes the mean energy 1. */
static int make_plan(void)
{
    static double points_iq[2 * ORDER];
    static uint32_t labels[ORDER];
    const double a = 0.15430334996209191;
    size_t where = 0;
    for (uint32_t i = 0; i < 8; i++)
        for (uint32_t q = 0; q < 8; q++) {
            const uint32_t p = 8 * i + q;
            points_iq[2 * p] = a * (2. * i - 7);
            points_iq[2 * p + 1] = a * (2. * q - 7);
            labels[p] = (i ^ i >> 1) << 3 | (q ^ q >> 1);
        }
    const int status = pdm_plan_init(plan, sizeof plan_memory, points_iq, labels, ORDER, &where);
    if (status != PDM_OK)
        printf("point %lu: %s\n", (unsigned long)where, pdm_status_text(status));
    return status;
}

int main(void)
{
    /* received samples, the channel gain each of them met, and N0 */
    const float y_iq[2 * SYMBOLS] = {-1.07f, 0.46f, 0.33f, -0.21f, 0.02f, -0.74f};
    const float gain_iq[2 * SYMBOLS] = {1.f, 0.f, 0.8f, 0.3f, 0.2f, -0.9f};
    const float noise_variance = 0.02f;
    const pdm_settings settings = {.rule = PDM_MAX_LOG, .word_bits = 6, .word_step = 0.5};
    int8_t words[BITS * SYMBOLS];
    size_t where = 0;

    if (make_plan() != PDM_OK)
        return 1;
    const int status = pdm_demap_i8(plan, &settings, SYMBOLS, y_iq, &noise_variance, 1, gain_iq,
                                    SYMBOLS, NULL, words, &where);
    if (status != PDM_OK) {
        printf("N0 %lu: %s\n", (unsigned long)where, pdm_status_text(status));
        return 1;
    }
    for (int s = 0; s < SYMBOLS; s++) {
        printf("symbol %d:", s);
        for (int k = 0; k < BITS; k++)
            printf(" %3d", words[BITS * s + k]);
        printf("\n");
    }
    return 0;
}

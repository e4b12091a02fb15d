/* What the compiled steps of the sight share. Each .c file beside this one is the compiled form of the Python module of
 * the same name; the method and its sources are described there, and tests hold both forms against each other. */
#ifndef EDGEWATCH_KERNELS_H
#define EDGEWATCH_KERNELS_H

#include <math.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

/* Loops over pixels are compiled twice on x86-64, for the instructions that every such processor has and for wider ones;
 * the loader of the C library picks when the program starts. Elsewhere the compiler's own baseline serves. */
#if defined(__x86_64__) && defined(__GNUC__) && !defined(__clang__) && defined(__GLIBC__)
#define WIDE __attribute__((target_clones("avx2", "default")))
#else
#define WIDE
#endif

#define EXPORT __attribute__((visibility("default")))

/* Bilinear value of a picture (height x width) at a point between pixels; outside it is dark. */
static inline float read_level(const float *picture, int height, int width, float x, float y)
{
    if (!(x > -1.0f && y > -1.0f && x < (float)width && y < (float)height))
        return 0.0f;
    int column = (int)(x + 1.0f) - 1, row = (int)(y + 1.0f) - 1;
    if (column >= width || row >= height) /* a hair before the edge, and rounded onto it */
        return 0.0f;
    float right = x - (float)column, down = y - (float)row;
    const float *at = picture + (ptrdiff_t)row * width + column;
    if (column >= 0 && row >= 0 && column + 1 < width && row + 1 < height) {
        float upper = at[0] + right * (at[1] - at[0]);
        float lower = at[width] + right * (at[width + 1] - at[width]);
        return upper + down * (lower - upper);
    }
    float a = column >= 0 && row >= 0 ? at[0] : 0.0f;
    float b = column + 1 < width && row >= 0 ? at[1] : 0.0f;
    float c = column >= 0 && row + 1 < height ? at[width] : 0.0f;
    float d = column + 1 < width && row + 1 < height ? at[width + 1] : 0.0f;
    float upper = a + right * (b - a), lower = c + right * (d - c);
    return upper + down * (lower - upper);
}

#endif

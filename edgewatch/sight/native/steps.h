/* Steps of brightness along lines: see steps.py. */
#ifndef EDGEWATCH_STEPS_H
#define EDGEWATCH_STEPS_H

#include "lengths.h"

/* A blurred picture. */
typedef struct {
    const float *blurred;
    int32_t height, width;
} Picture;

/* Steps, one array a column. */
typedef struct {
    const double *at, *inward, *height, *size, *share;
    const uint8_t *begins;
} Steps;

static inline float read(const Picture *picture, double x, double y)
{
    return read_level(picture->blurred, picture->height, picture->width, (float)x, (float)y);
}

#endif

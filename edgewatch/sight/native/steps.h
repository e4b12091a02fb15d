/* Steps of brightness along lines: see steps.py. */
#ifndef EDGEWATCH_STEPS_H
#define EDGEWATCH_STEPS_H

#include "kernels.h"

/* A blurred picture. */
typedef struct {
    const float *blurred;
    int32_t height, width;
} Picture;

/* Straight pieces of ridge, one array a column. */
typedef struct {
    const double *begin, *end, *axis, *length;
    const int64_t *points;
    int32_t number;
} Pieces;

typedef struct {
    double at[2], inward[2], height, size, share;
    int32_t begins;
} Step;

typedef struct {
    double noise, share;
    int32_t least_points, beyond_px, box_px;
} StepRules;

static inline float read(const Picture *picture, double x, double y)
{
    return read_level(picture->blurred, picture->height, picture->width, (float)x, (float)y);
}

/* The least whole number that is no less, of numbers that are no less than 0. */
static inline int whole_above(double value)
{
    int whole = (int)value;
    return whole + (whole < value);
}

/* Values at n points `apart` px from each other, the first at `first` px from a point along a unit vector; or all in
 * lengths of a longer vector. */
void read_line(const Picture *picture, const double *from, const double *along, double first, double apart, int n,
               float *level);

int edgewatch_steps(const Pieces *pieces, double ax, double ay, const Picture *picture, double noise, const StepRules *rules,
                    Step *steps, int most);

#endif

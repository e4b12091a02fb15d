/* Where lines come from: see steadiness.py. */
#ifndef EDGEWATCH_STEADINESS_H
#define EDGEWATCH_STEADINESS_H

#include "kernels.h"

typedef struct {
    double contact_x, contact_y, axis_x, axis_y, least_cosine, mad_to_sigma, median_error;
    int32_t nearest_lines, least_lines;
} OriginRules;

/* Offset across the axis and its standard error (px) of n lines (x0 y0 x1 y1); NaN with too few. Returns -1 without
 * memory. */
int read_origin(int n, const double *lines, const OriginRules *rules, double *offset_px, double *error_px);

#endif

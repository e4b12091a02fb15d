/* Steps left alone, and which of them are a streak's end: see lone.py. */
#ifndef EDGEWATCH_LONE_H
#define EDGEWATCH_LONE_H

#include "lengths.h"
#include "steps.h"

typedef struct {
    double turn_most, turn_error_most, turn_errors, turn_spread, turn_unknown, dark_noise, dark_share, inner_px, least_px;
    double least_share, least_lit, long_px, far_from, far_to, beside_px, most, odds_least, same_weight, arms_share;
    const double *beside_along_px;
    float same_side_px, same_cos, skew_most, end_side_px, end_far_px;
    int32_t far_box, beside_count;
} LoneRules;

typedef struct {
    const float *hidden, *hidden_bias, *output;
    float output_bias;
    int32_t units;
} LoneNet;

int edgewatch_lone(int n, const Step *steps, int pairs, const int32_t *pair, const Picture *picture, double noise,
                   const Lengths *lengths, int radial, const LoneRules *rules, const LoneNet *net, double *begin,
                   double *end);

#endif

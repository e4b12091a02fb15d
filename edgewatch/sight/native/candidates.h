/* What was traced in a picture, and candidates for bursts in it. */
#ifndef EDGEWATCH_CANDIDATES_H
#define EDGEWATCH_CANDIDATES_H

#include <stdint.h>

typedef struct {
    const uint8_t *excess;                      /* height x width */
    const float *blurred;                       /* height x width */
    const double *begin, *end, *axis, *length; /* of pieces of ridge; the first three (pieces, 2) */
    double contact_x, contact_y, noise;        /* noise of the blurred picture */
    int32_t height, width, pieces;
} Traced;

typedef struct {
    double gap_px, inner_px, gap_lengths, least_sin, cell_px, near, least_votes; /* near: outer tap of the votes' blur */
    double blob_noise, blob_fall, light_noise, light_apart_px;
    const int32_t *blob_step; /* (blob_steps, 2) */
    int32_t blob_steps, blob_margin;
} CandidateRules;

/* Candidates of all kinds, room in `at` for `most` points (x, y). Returns their number, which is more than `most` where
 * there was too little room, or -1 without memory. */
int edgewatch_candidates(const Traced *traced, const CandidateRules *rules, double *at, int most);

#endif

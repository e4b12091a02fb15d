/* Bursts that are remembered, which of new ones are news, and which lines are arms: see glow.py. */
#ifndef EDGEWATCH_GLOW_H
#define EDGEWATCH_GLOW_H

#include "lengths.h"

/* A burst of an earlier picture: place (px), probability, how many pictures ago. */
typedef struct {
    double x, y, sure, age;
} Burst;

typedef struct {
    double late_sure, arm_side_px, arm_gap_px, late_gap_px, short_share, radial_cos, across_cos, across_share;
    double stem_least_px, old_reach;
    int32_t from_contact, least_arms;
} ArmRules;

typedef struct {
    double same_px, fresh_least, fresh_near, late_sure, drift_share, drift_s, period_s, exposure_s;
    int32_t pictures;
} NewsRules;

/* Bursts of one picture, as glow.py has them. */
typedef struct {
    const double *at, *sure, *late, *fresh;
    int number;
} Apexes;

int sort_lines(int n, const double *begin, double *end, const uint8_t *whole, int m, const double *at, const double *late,
               int olds, const Burst *old, const Lengths *lengths, const ArmRules *rules, uint8_t *streak, int64_t *arms);

/* Which bursts are news: bit 0 beside all that are remembered, bit 1 beside those of at least the probability `sure`. */
void find_news(const Apexes *apexes, int olds, const Burst *old, double sure, const Lengths *lengths,
               const NewsRules *rules, uint8_t *news);

/* What is remembered from here on; returns how many. `kept` has room for all old ones and all new ones. */
int remember(const Apexes *apexes, int olds, const Burst *old, const NewsRules *rules, Burst *kept);

#endif

/* How long streaks are at a distance from the contact point: see lengths.py. */
#ifndef EDGEWATCH_LENGTHS_H
#define EDGEWATCH_LENGTHS_H

#include "kernels.h"

/* Logarithms of typical lengths at `number` places; number 0 means not known. */
typedef struct {
    double *places, *typical;
    double contact_x, contact_y, longest_px, spread;
    int32_t number;
} Lengths;

/* And what they are learnt from: of the streaks kept, the oldest first, distance and logarithm of length; length seen lately,
 * in all and on lines from the contact point; how many streaks are kept, and are newer than the table. */
typedef struct {
    Lengths lengths;
    double *away, *log;
    double all_px, straight_px;
    int32_t kept, fresh;
} LengthMemory;

typedef struct {
    double radial_cos, share_keep, from_contact_share, middle_spread, spread_least, spread_most, longest_factor;
    int32_t most_kept, least_kept, new_part, most_parts, part_least;
} LengthRules;

static inline double away_px(const Lengths *lengths, double x, double y)
{
    double dx = x - lengths->contact_x, dy = y - lengths->contact_y;
    return sqrt(dx * dx + dy * dy);
}

/* Logarithm of the typical length at a point: between the places as np.interp has it. */
static inline double expected(const Lengths *lengths, double x, double y)
{
    double away = away_px(lengths, x, y);
    int n = lengths->number, k = 0;
    if (away <= lengths->places[0])
        return lengths->typical[0];
    if (away >= lengths->places[n - 1])
        return lengths->typical[n - 1];
    while (lengths->places[k + 1] <= away)
        k++;
    double slope = (lengths->typical[k + 1] - lengths->typical[k]) / (lengths->places[k + 1] - lengths->places[k]);
    return slope * (away - lengths->places[k]) + lengths->typical[k];
}

/* Whether streaks come from the contact point as given. */
static inline int from_contact(const LengthMemory *memory, const LengthRules *rules)
{
    return memory->lengths.number && memory->straight_px > rules->from_contact_share * memory->all_px;
}

int edgewatch_learn(int n, const double *begin, const double *end, LengthMemory *memory, const LengthRules *rules);

#endif

/* How long streaks are at a distance from the contact point: see lengths.py. */
#ifndef EDGEWATCH_LENGTHS_H
#define EDGEWATCH_LENGTHS_H

#include "kernels.h"

/* Logarithms of typical lengths at `number` places; number 0 means not known. */
typedef struct {
    const double *places, *typical;
    double contact_x, contact_y, longest_px, spread;
    int32_t number;
} Lengths;

/* Logarithm of the typical length at a point: between the places as np.interp has it. */
static inline double expected(const Lengths *lengths, double x, double y)
{
    double dx = x - lengths->contact_x, dy = y - lengths->contact_y, away = sqrt(dx * dx + dy * dy);
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

#endif

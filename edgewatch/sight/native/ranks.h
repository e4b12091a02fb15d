/* The middle of values: see ranks.py. */
#ifndef EDGEWATCH_RANKS_H
#define EDGEWATCH_RANKS_H

#include "kernels.h"

/* Median of n values, at least one; of an even number the upper of the two in the middle. Changes their order: each round
 * parts what is left about a value and goes on with the side that the middle is in (Hoare's selection, 1961). */
static inline double middle_of(double *values, int n)
{
    int from = 0, to = n - 1, half = n / 2;
    while (from < to) {
        double pivot = values[from + (to - from) / 2];
        int i = from, j = to;
        while (i <= j) {
            while (values[i] < pivot)
                i++;
            while (values[j] > pivot)
                j--;
            if (i <= j) {
                double kept = values[i];
                values[i++] = values[j];
                values[j--] = kept;
            }
        }
        if (half <= j)
            to = j;
        else if (half >= i)
            from = i;
        else
            break;
    }
    return values[half];
}

#endif

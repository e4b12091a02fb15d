/* Putting few things in order: qsort calls a function for every comparison, which takes most of its time. */
#ifndef EDGEWATCH_ORDER_H
#define EDGEWATCH_ORDER_H

#include "kernels.h"

/* What something is ordered by, and which it is. */
typedef struct {
    double key;
    int32_t index;
} Key;

/* Sort n keys, the least first; equal ones stay in their order. `room` has room for as many. */
static inline void sort_keys(Key *keys, int n, Key *room)
{
    enum { RUN = 8 };
    for (int from = 0; from < n; from += RUN)
        for (int i = from + 1, to = from + RUN < n ? from + RUN : n; i < to; i++) {
            Key one = keys[i];
            int j = i;
            for (; j > from && keys[j - 1].key > one.key; j--)
                keys[j] = keys[j - 1];
            keys[j] = one;
        }
    Key *now = keys, *next = room;
    for (int size = RUN; size < n; size *= 2) {
        for (int from = 0; from < n; from += 2 * size) {
            int middle = from + size < n ? from + size : n, to = from + 2 * size < n ? from + 2 * size : n;
            int i = from, j = middle, k = from;
            while (i < middle && j < to) {
                int second = now[j].key < now[i].key;
                next[k++] = now[second ? j : i];
                i += !second;
                j += second;
            }
            memcpy(next + k, now + i, sizeof(Key) * (size_t)(middle - i));
            memcpy(next + k + middle - i, now + j, sizeof(Key) * (size_t)(to - j));
        }
        Key *done = now;
        now = next;
        next = done;
    }
    if (now != keys && n > 0)
        memcpy(keys, now, sizeof(Key) * (size_t)n);
}

#endif

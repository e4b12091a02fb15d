/* A picture less its ground, from a pattern and a drift given in square cells: see background.py. */
#include "kernels.h"

enum { CELL = 8 };

WIDE static void add_row(const uint8_t *row, uint16_t *sum, int width)
{
    for (int x = 0; x < width; x++)
        sum[x] = (uint16_t)(sum[x] + row[x]);
}

/* Means of a picture (height x width, multiples of CELL) in its cells, rounded to whole grey levels, half to even.
 * Returns -1 without memory. */
EXPORT int edgewatch_cells(const uint8_t *picture, int height, int width, float *cells)
{
    uint16_t *sum = malloc(sizeof(uint16_t) * (size_t)width);
    if (!sum)
        return -1;
    for (int y = 0; y < height; y += CELL) {
        memset(sum, 0, sizeof(uint16_t) * (size_t)width);
        for (int k = 0; k < CELL; k++)
            add_row(picture + (size_t)(y + k) * width, sum, width);
        for (int x = 0; x < width; x += CELL) {
            int total = 0;
            for (int k = 0; k < CELL; k++)
                total += sum[x + k];
            int whole = total / (CELL * CELL), rest = total % (CELL * CELL);
            whole += rest > CELL * CELL / 2 || (rest == CELL * CELL / 2 && whole % 2);
            *cells++ = (float)whole;
        }
    }
    free(sum);
    return 0;
}

/* Between the centres of the cells of a row, which has one more at either end: sixteenths of each;
 * rounded from 1/256 to whole grey levels. */
WIDE static void widen(const int32_t *row, int16_t *drift, int wide)
{
    static const int32_t own[CELL] = {9, 11, 13, 15, 15, 13, 11, 9};
    static const int32_t left[CELL] = {7, 5, 3, 1, 0, 0, 0, 0}, right[CELL] = {0, 0, 0, 0, 1, 3, 5, 7};
    for (int x = 0; x < wide; x++)
        for (int i = 0; i < CELL; i++)
            drift[x * CELL + i] =
                (int16_t)((own[i] * row[x] + left[i] * row[x - 1] + right[i] * row[x + 1] + 128) >> 8);
}

WIDE static void take_ground(const uint8_t *restrict picture, const uint8_t *restrict pattern,
                             const int16_t *restrict drift, uint8_t *restrict ground, uint8_t *restrict excess,
                             int width)
{
    for (int x = 0; x < width; x++) {
        int16_t level = (int16_t)(pattern[x] + drift[x]);
        level = level < 0 ? 0 : level;
        level = level > 255 ? 255 : level;
        int16_t over = (int16_t)(picture[x] - level);
        ground[x] = (uint8_t)level;
        excess[x] = (uint8_t)(over < 0 ? 0 : over);
    }
}

/* Excess of a picture over pattern and drift, whole grey levels in cells of CELL px, drawn between the cells' centres
 * along straight lines. Out: ground, excess (height, width). Returns -1 without memory. */
EXPORT int edgewatch_excess(const uint8_t *picture, const uint8_t *pattern, const int32_t *cells, int height, int width,
                            uint8_t *ground, uint8_t *excess)
{
    int wide = width / CELL, high = height / CELL;
    int32_t *work = malloc(sizeof(int32_t) * ((size_t)wide + 2) + sizeof(int16_t) * (size_t)width);
    if (!work)
        return -1;
    int32_t *row = work + 1;
    int16_t *drift = (int16_t *)(work + wide + 2);
    for (int y = 0; y < height; y++) {
        int k = y % CELL, own = y / CELL;
        int other = k < CELL / 2 ? (own > 0 ? own - 1 : own) : (own + 1 < high ? own + 1 : own);
        int near = k < CELL / 2 ? 2 * k + 9 : 23 - 2 * k; /* sixteenths */
        for (int x = 0; x < wide; x++)
            row[x] = near * cells[own * wide + x] + (16 - near) * cells[other * wide + x];
        row[-1] = row[0];
        row[wide] = row[wide - 1];
        widen(row, drift, wide);
        size_t at = (size_t)y * width;
        take_ground(picture + at, pattern + at, drift, ground + at, excess + at, width);
    }
    free(work);
    return 0;
}

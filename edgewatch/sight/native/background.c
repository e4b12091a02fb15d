/* A picture less its ground, once there is a pattern: see background.py. Grey levels are whole numbers throughout, so
 * medians come from counts and nothing is rounded but the drift. */
#include "kernels.h"

enum { CELL = 8, LEVELS = 1024 }; /* side of a cell; more than all differences of two differences of grey levels */

typedef struct {
    double deepest_dn, other_scene_dn, noise_clip, least_noise_dn;
    int32_t row_stride, column_stride, measure_noise;
} GroundRules;

typedef struct {
    double level_dn, uneven_dn, raw_noise_dn;
} GroundState;

WIDE static void add_row(const uint8_t *row, uint16_t *sum, int width)
{
    for (int x = 0; x < width; x++)
        sum[x] = (uint16_t)(sum[x] + row[x]);
}

/* Means of a picture (height x width, multiples of CELL) in its cells, half to even. sum: width. */
static void mean_cells(const uint8_t *picture, int height, int width, uint16_t *sum, float *cells)
{
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
}

EXPORT int edgewatch_cells(const uint8_t *picture, int height, int width, float *cells)
{
    uint16_t *sum = malloc(sizeof(uint16_t) * (size_t)width);
    if (!sum)
        return -1;
    mean_cells(picture, height, width, sum, cells);
    free(sum);
    return 0;
}

/* The value that n / 2 of n whole values between -LEVELS and LEVELS lie below. */
static int middle(const int32_t *values, int n)
{
    int32_t count[2 * LEVELS] = {0};
    for (int k = 0; k < n; k++)
        count[values[k] + LEVELS]++;
    int below = 0, value = -1;
    do
        below += count[++value];
    while (below <= n / 2);
    return value - LEVELS;
}

static int middle_away(const int32_t *values, int n, int centre)
{
    int32_t count[2 * LEVELS] = {0};
    for (int k = 0; k < n; k++)
        count[abs(values[k] - centre)]++;
    int below = 0, value = -1;
    do
        below += count[++value];
    while (below <= n / 2);
    return value;
}

/* Copies high x wide values into the middle of a frame with `reach` more on every side, which repeat the edge, or mirror
 * what lies inside of it. */
static void put_in_frame(const int32_t *values, int32_t *frame, int high, int wide, int reach, int mirrored)
{
    int across = wide + 2 * reach;
    for (int y = -reach; y < high + reach; y++) {
        int from = y < 0 ? (mirrored ? -y : 0) : y >= high ? (mirrored ? 2 * (high - 1) - y : high - 1) : y;
        const int32_t *in = values + from * wide;
        int32_t *out = frame + (y + reach) * across + reach;
        memcpy(out, in, sizeof(int32_t) * (size_t)wide);
        for (int k = 1; k <= reach; k++) {
            out[-k] = in[mirrored ? k : 0];
            out[wide - 1 + k] = in[wide - 1 - (mirrored ? k : 0)];
        }
    }
}

enum { LEAST, GREATEST, SUM };

static inline int32_t join(int32_t a, int32_t b, int how)
{
    return how == LEAST ? (a < b ? a : b) : how == GREATEST ? (a > b ? a : b) : a + b;
}

/* Least, greatest or sum of what lies in squares of side 2 reach + 1 about each place, from a frame; row: wide values for
 * each row of the frame. */
static inline void over_squares(const int32_t *frame, int32_t *row, int32_t *out, int high, int wide, int reach, int how)
{
    int across = wide + 2 * reach;
    for (int y = 0; y < high + 2 * reach; y++) {
        for (int x = 0; x < wide; x++) {
            int32_t all = frame[y * across + x];
            for (int k = 1; k <= 2 * reach; k++)
                all = join(all, frame[y * across + x + k], how);
            row[y * wide + x] = all;
        }
    }
    for (int y = 0; y < high; y++) {
        memcpy(out + y * wide, row + y * wide, sizeof(int32_t) * (size_t)wide);
        for (int k = 1; k <= 2 * reach; k++)
            for (int x = 0; x < wide; x++)
                out[y * wide + x] = join(out[y * wide + x], row[(y + k) * wide + x], how);
    }
}

enum { REACH = 2 }; /* the opening's side is 2 REACH + 1 cells: a constant makes the loops below vector code */

/* Opened and averaged over squares, rounded. work: 2 (high + 2 REACH) (wide + 2 REACH). */
WIDE static void smooth(int32_t *cells, int32_t *work, int high, int wide)
{
    int32_t *row = work + (high + 2 * REACH) * (wide + 2 * REACH);
    put_in_frame(cells, work, high, wide, REACH, 0);
    over_squares(work, row, cells, high, wide, REACH, LEAST);
    put_in_frame(cells, work, high, wide, REACH, 0);
    over_squares(work, row, cells, high, wide, REACH, GREATEST);
    put_in_frame(cells, work, high, wide, REACH, 1);
    over_squares(work, row, cells, high, wide, REACH, SUM);
    int area = (2 * REACH + 1) * (2 * REACH + 1); /* odd, so there are no halves; shifted, so that division rounds down */
    for (int k = 0; k < high * wide; k++)
        cells[k] = (2 * cells[k] + area + 2 * area * LEVELS) / (2 * area) - LEVELS;
}

/* Between the centres of the cells of a row, which has one more at either end: sixteenths of each; rounded from 1/256 to
 * whole grey levels. */
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

/* Excess of a picture over its pattern and the drift, whole levels in cells, drawn between the cells' centres. row: wide
 * + 2; drift: width; ground: width. Of every row_stride-th row every column_stride-th place goes into the samples: picture
 * less ground, and ground. Returns how many. */
static int take_excess(const uint8_t *picture, const uint8_t *pattern, const int32_t *cells, int height, int width,
                       const GroundRules *rules, int32_t *row, int16_t *drift, uint8_t *ground, uint8_t *excess,
                       int32_t *left, int32_t *level)
{
    int wide = width / CELL, high = height / CELL, samples = 0;
    row++;
    for (int y = 0; y < height; y++) {
        int k = y % CELL, own = y / CELL;
        int other = k < CELL / 2 ? (own > 0 ? own - 1 : own) : (own + 1 < high ? own + 1 : own);
        int near = k < CELL / 2 ? 2 * k + 9 : 23 - 2 * k; /* sixteenths */
        for (int x = 0; x < wide; x++)
            row[x] = near * cells[own * wide + x] + (16 - near) * cells[other * wide + x];
        row[-1] = row[0];
        row[wide] = row[wide - 1];
        int uneven = 0;
        for (int x = 0; x < wide; x++)
            uneven |= row[x] ^ row[0];
        if (uneven)
            widen(row, drift, wide);
        else
            for (int x = 0; x < width; x++)
                drift[x] = (int16_t)((16 * row[0] + 128) >> 8);
        size_t at = (size_t)y * width;
        take_ground(picture + at, pattern + at, drift, ground, excess + at, width);
        for (int x = 0; y % rules->row_stride == 0 && x < width; x += rules->column_stride) {
            left[samples] = picture[at + x] - ground[x];
            level[samples++] = ground[x];
        }
    }
    return samples;
}

static void spread(const int32_t *values, int n, int centre, double most, double *mean, double *deviation)
{
    double sum = 0.0, squares = 0.0;
    int used = 0;
    for (int k = 0; k < n; k++) {
        if (abs(values[k] - centre) <= most) {
            sum += values[k];
            squares += (double)values[k] * values[k];
            used++;
        }
    }
    *mean = used ? sum / used : 0.0;
    double variance = used ? squares / used - *mean * *mean : 0.0;
    *deviation = variance > 0.0 ? sqrt(variance) : 0.0;
}

/* Excess of a picture over the ground that pattern and picture give. last_cells: means of the picture before, replaced by
 * this one's. Returns 1, and nothing else, when the picture shows another scene, 0 otherwise, -1 without memory. */
EXPORT int edgewatch_excess(const uint8_t *picture, const uint8_t *pattern, const float *pattern_cells,
                            float *last_cells, int height, int width, const GroundRules *rules, uint8_t *excess,
                            GroundState *state)
{
    int wide = width / CELL, high = height / CELL, n = wide * high, answer = -1;
    size_t framed = (size_t)(high + 2 * REACH) * (wide + 2 * REACH);
    size_t samples = (size_t)(height / rules->row_stride + 1) * (width / rules->column_stride + 1);
    float *cells = malloc(sizeof(float) * (size_t)n);
    int32_t *whole = malloc(sizeof(int32_t) * ((size_t)n + 2 * framed + wide + 2 + 2 * samples));
    char *rows = malloc((size_t)width * (sizeof(int16_t) * 2 + 1));
    if (!cells || !whole || !rows)
        goto done;
    int32_t *work = whole + n, *row = work + 2 * framed, *left = row + wide + 2, *level = left + samples;
    uint16_t *sum = (uint16_t *)rows;
    int16_t *drift = (int16_t *)rows + width;
    mean_cells(picture, height, width, sum, cells);
    for (int k = 0; k < n; k++)
        whole[k] = (int32_t)cells[k] - (int32_t)last_cells[k];
    answer = middle_away(whole, n, middle(whole, n)) > rules->other_scene_dn;
    if (answer)
        goto done;
    memcpy(last_cells, cells, sizeof(float) * (size_t)n);
    for (int k = 0; k < n; k++)
        whole[k] = (int32_t)cells[k] - (int32_t)pattern_cells[k];
    int deepest = middle(whole, n) - (int)rules->deepest_dn;
    for (int k = 0; k < n; k++)
        whole[k] = whole[k] > deepest ? whole[k] : deepest;
    smooth(whole, work, high, wide);
    int taken = take_excess(picture, pattern, whole, height, width, rules, row, drift, (uint8_t *)(drift + width),
                            excess, left, level);
    spread(level, taken, 0, LEVELS, &state->level_dn, &state->uneven_dn);
    if (rules->measure_noise) {
        double mean;
        int centre = middle(left, taken);
        double scale = 1.4826 * middle_away(left, taken, centre);
        scale = scale > rules->least_noise_dn ? scale : rules->least_noise_dn;
        spread(left, taken, centre, rules->noise_clip * scale, &mean, &state->raw_noise_dn);
    }
done:
    free(cells);
    free(whole);
    free(rows);
    return answer;
}

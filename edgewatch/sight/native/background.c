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

/* Sums over the cells of CELL rows of a picture. The bytes of a cell's row are added side by side in one word, which holds
 * four sums of 16 bits. */
WIDE static void add_cells(const uint8_t *rows, int width, int32_t *total)
{
    const uint64_t every_other = 0x00ff00ff00ff00ff, lower = 0x0000ffff0000ffff;
    for (int x = 0; x < width / CELL; x++) {
        uint64_t four = 0;
        for (int k = 0; k < CELL; k++) {
            uint64_t eight;
            memcpy(&eight, rows + (size_t)k * width + CELL * x, sizeof eight);
            four += (eight & every_other) + (eight >> 8 & every_other);
        }
        uint64_t two = (four & lower) + (four >> 16 & lower);
        total[x] = (int32_t)(two + (two >> 32));
    }
}

/* Means of a picture (height x width, multiples of CELL) in its cells, half to even. total: width / CELL. */
WIDE static void mean_cells(const uint8_t *picture, int height, int width, int32_t *total, float *cells)
{
    int wide = width / CELL;
    for (int y = 0; y < height; y += CELL, cells += wide) {
        add_cells(picture + (size_t)y * width, width, total);
        for (int x = 0; x < wide; x++)
            cells[x] = (float)((total[x] + CELL * CELL / 2 - 1 + (total[x] / (CELL * CELL) & 1)) / (CELL * CELL));
    }
}

EXPORT int edgewatch_cells(const uint8_t *picture, int height, int width, float *cells)
{
    int32_t *total = malloc(sizeof(int32_t) * (size_t)(width / CELL));
    if (!total)
        return -1;
    mean_cells(picture, height, width, total, cells);
    free(total);
    return 0;
}

WIDE static void follow(const uint8_t *restrict picture, uint8_t *restrict pattern, size_t count, uint8_t up)
{
    for (size_t k = 0; k < count; k++) {
        uint8_t level = (uint8_t)(pattern[k] - (picture[k] < pattern[k]));
        pattern[k] = (uint8_t)(level + (up & (picture[k] > level)));
    }
}

/* The pattern steps down where the picture is darker, then up, if it may, where it is brighter; and its means in cells. */
EXPORT int edgewatch_follow(const uint8_t *picture, uint8_t *pattern, int height, int width, int up, float *cells)
{
    follow(picture, pattern, (size_t)height * width, up != 0);
    return edgewatch_cells(pattern, height, width, cells);
}

/* How often each whole value between -LEVELS and LEVELS comes. Two neighbours are counted in different columns: equal
 * ones need not wait for each other. */
typedef struct {
    int32_t count[2 * LEVELS][2];
    int number;
} Histogram;

static inline void count_value(Histogram *all, int value)
{
    all->count[value + LEVELS][all->number++ & 1]++;
}

static inline int times(const Histogram *all, int value)
{
    return all->count[value + LEVELS][0] + all->count[value + LEVELS][1];
}

/* The value that half of them lie below. */
static int middle(const Histogram *all)
{
    int below = 0, value = -LEVELS - 1;
    do {
        value++;
        below += times(all, value);
    } while (below <= all->number / 2);
    return value;
}

/* The distance from a centre that half of them lie within; all values and the centre are grey levels or differences of
 * two, so that twice their range fits. */
static int middle_away(const Histogram *all, int centre)
{
    int within = times(all, centre), away = 0;
    while (within <= all->number / 2) {
        away++;
        within += times(all, centre + away) + times(all, centre - away);
    }
    return away;
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

/* A row of cells, which has one more at either end, drawn between the cells' centres: sixteenths. */
WIDE static void widen(const int32_t *row, int16_t *drawn, int wide)
{
    static const int32_t own[CELL] = {9, 11, 13, 15, 15, 13, 11, 9};
    static const int32_t left[CELL] = {7, 5, 3, 1, 0, 0, 0, 0}, right[CELL] = {0, 0, 0, 0, 1, 3, 5, 7};
    for (int x = 0; x < wide; x++)
        for (int i = 0; i < CELL; i++)
            drawn[x * CELL + i] = (int16_t)(own[i] * row[x] + left[i] * row[x - 1] + right[i] * row[x + 1]);
}

/* From the row half a pixel below the centres of one row of cells down to the next row's: what to begin with and what to
 * add from row to row, in 1/128, with a half for rounding. A sum of 256 parts fits in 17 bits, of which the last one never
 * changes, as the steps are even: half of it fits in 16. */
WIDE static void begin_strip(const int16_t *restrict upper, const int16_t *restrict lower, int16_t *restrict drift,
                             int16_t *restrict slope, int width)
{
    for (int x = 0; x < width; x++) {
        drift[x] = (int16_t)((15 * upper[x] + lower[x] + 128) >> 1);
        slope[x] = (int16_t)(lower[x] - upper[x]);
    }
}

WIDE static void take_ground(const uint8_t *restrict picture, const uint8_t *restrict pattern, int16_t *restrict drift,
                             const int16_t *restrict slope, uint8_t *restrict ground, uint8_t *restrict excess,
                             int width)
{
    for (int x = 0; x < width; x++) {
        int16_t level = (int16_t)(pattern[x] + (drift[x] >> 7));
        level = level < 0 ? 0 : level;
        level = level > 255 ? 255 : level;
        drift[x] = (int16_t)(drift[x] + slope[x]);
        ground[x] = (uint8_t)level;
    }
    for (int x = 0; x < width; x++)
        excess[x] = (uint8_t)((picture[x] > ground[x] ? picture[x] : ground[x]) - ground[x]);
}

/* What is read at every column_stride-th place of every row_stride-th row. */
typedef struct {
    Histogram left; /* picture less ground, when noise is measured */
    int64_t sum, squares;
    int number;
} Samples;

static void take_samples(const uint8_t *picture, const uint8_t *ground, int width, const GroundRules *rules,
                         Samples *samples)
{
    int64_t sum = 0, squares = 0;
    int number = 0;
    for (int x = 0; x < width; x += rules->column_stride, number++) {
        int level = ground[x];
        sum += level;
        squares += level * level;
        if (rules->measure_noise)
            count_value(&samples->left, picture[x] - level);
    }
    samples->sum += sum;
    samples->squares += squares;
    samples->number += number;
}

/* Excess of a picture over its pattern and the drift, whole levels in cells, drawn between the cells' centres. row: wide
 * + 2; lines: 4 width; ground: width. */
static void take_excess(const uint8_t *picture, const uint8_t *pattern, const int32_t *cells, int height, int width,
                        const GroundRules *rules, int32_t *row, int16_t *lines, uint8_t *ground, uint8_t *excess,
                        Samples *samples)
{
    int wide = width / CELL, high = height / CELL;
    int16_t *drift = lines, *slope = lines + width, *upper = slope + width, *lower = upper + width;
    for (int strip = 0, y = 0; strip <= high; strip++) {
        int below = strip < high ? strip : high - 1, end = strip < high ? strip * CELL + CELL / 2 : height;
        memcpy(row + 1, cells + below * wide, sizeof(int32_t) * (size_t)wide);
        row[0] = row[1];
        row[wide + 1] = row[wide];
        widen(row + 1, lower, wide);
        begin_strip(strip ? upper : lower, lower, drift, slope, width);
        for (; y < end; y++) {
            size_t at = (size_t)y * width;
            take_ground(picture + at, pattern + at, drift, slope, ground, excess + at, width);
            if (y % rules->row_stride == 0)
                take_samples(picture + at, ground, width, rules, samples);
        }
        int16_t *spare = upper;
        upper = lower;
        lower = spare;
    }
}

static double deviation(double sum, double squares, int number)
{
    double mean = number ? sum / number : 0.0;
    double variance = number ? squares / number - mean * mean : 0.0;
    return variance > 0.0 ? sqrt(variance) : 0.0;
}

/* Deviation of the values that lie no further than `most` from a centre. */
static double clipped_deviation(const Histogram *all, int centre, double most)
{
    double sum = 0.0, squares = 0.0;
    int number = 0;
    for (int value = -LEVELS; value < LEVELS; value++) {
        if (abs(value - centre) <= most) {
            int here = times(all, value);
            sum += (double)here * value;
            squares += (double)here * value * value;
            number += here;
        }
    }
    return deviation(sum, squares, number);
}

/* Excess of a picture over the ground that pattern and picture give. last_cells: means of the picture before, replaced by
 * this one's. Returns 1, and nothing else, when the picture shows another scene, 0 otherwise, -1 without memory. */
EXPORT int edgewatch_excess(const uint8_t *picture, const uint8_t *pattern, const float *pattern_cells,
                            float *last_cells, int height, int width, const GroundRules *rules, uint8_t *excess,
                            GroundState *state)
{
    int wide = width / CELL, high = height / CELL, n = wide * high, answer = -1;
    size_t framed = (size_t)(high + 2 * REACH) * (wide + 2 * REACH);
    float *cells = malloc(sizeof(float) * (size_t)n);
    int32_t *whole = malloc(sizeof(int32_t) * ((size_t)n + 2 * framed + wide + 2));
    char *rows = malloc((size_t)width * (sizeof(int16_t) * 4 + 1));
    Histogram *all = calloc(1, sizeof *all), *moved = calloc(1, sizeof *moved);
    Samples *samples = calloc(1, sizeof *samples);
    if (!cells || !whole || !rows || !all || !moved || !samples)
        goto done;
    int32_t *work = whole + n, *row = work + 2 * framed;
    int16_t *lines = (int16_t *)rows;
    mean_cells(picture, height, width, row, cells);
    for (int k = 0; k < n; k++) {
        whole[k] = (int32_t)cells[k] - (int32_t)pattern_cells[k];
        count_value(all, whole[k]);
        count_value(moved, (int32_t)cells[k] - (int32_t)last_cells[k]);
    }
    answer = middle_away(moved, middle(moved)) > rules->other_scene_dn;
    if (answer)
        goto done;
    memcpy(last_cells, cells, sizeof(float) * (size_t)n);
    int deepest = middle(all) - (int)rules->deepest_dn;
    for (int k = 0; k < n; k++)
        whole[k] = whole[k] > deepest ? whole[k] : deepest;
    smooth(whole, work, high, wide);
    take_excess(picture, pattern, whole, height, width, rules, row, lines, (uint8_t *)(lines + 4 * width), excess,
                samples);
    state->level_dn = samples->number ? (double)samples->sum / samples->number : 0.0;
    state->uneven_dn = deviation((double)samples->sum, (double)samples->squares, samples->number);
    if (rules->measure_noise) {
        int centre = middle(&samples->left);
        double scale = 1.4826 * middle_away(&samples->left, centre);
        scale = scale > rules->least_noise_dn ? scale : rules->least_noise_dn;
        state->raw_noise_dn = clipped_deviation(&samples->left, centre, rules->noise_clip * scale);
    }
done:
    free(cells);
    free(whole);
    free(rows);
    free(all);
    free(moved);
    free(samples);
    return answer;
}

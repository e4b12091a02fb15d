/* Ridge points of a picture: see ridges.py. */
#include "kernels.h"

enum { BATCH = 256, BLOCK = 32, REACH = 2, TAPS = 2 * REACH + 1 }; /* the last two: of the blur */

typedef struct {
    float threshold, crest_px, least_bend;
    int32_t margin, inner, outer; /* of the blur's taps in 1/256: beside the middle one, and beyond */
} RidgeRules;

typedef struct {
    int32_t *index;
    float *x, *y, *cos, *sin, *height, *bend, *offset;
    int count, most; /* found so far; room, beside one more that is written to when there is none */
} Points;

/* Pixels that may be ridge points, of one or more rows. */
typedef struct {
    int32_t *pixel, *row;
    int number;
} Tops;

/* Place of a row or column beyond the edge, mirrored at the last one. */
static int mirrored(int at, int size)
{
    while (size > 1 && (at < 0 || at >= size))
        at = at < 0 ? -at : 2 * (size - 1) - at;
    return size > 1 ? at : 0;
}

WIDE static void widen_row(const uint8_t *restrict row, uint16_t *restrict wide, int width)
{
    for (int x = 0; x < width; x++)
        wide[x] = row[x];
}

/* Weighted sum over five rows, in 1/256, which fits in 16 bits. */
WIDE static void blur_down(const uint16_t *const *rows, float *restrict sum, int width, const RidgeRules *rules)
{
    const uint16_t *a = rows[0], *b = rows[1], *c = rows[2], *d = rows[3], *e = rows[4];
    uint16_t beside = (uint16_t)rules->inner, beyond = (uint16_t)rules->outer;
    uint16_t own = (uint16_t)(256 - 2 * rules->inner - 2 * rules->outer);
    for (int x = 0; x < width; x++) {
        uint16_t two = (uint16_t)(a[x] + e[x]), near = (uint16_t)(b[x] + d[x]);
        sum[x] = (float)(uint16_t)(own * c[x] + beside * near + beyond * two);
    }
}

/* Weighted sum over five columns; returns whether one of them is above the threshold. */
static inline int blur_block(const float *restrict sum, float *restrict blurred, int size, float own, float beside,
                             float beyond, float threshold)
{
    int lit = 0;
    for (int x = 0; x < size; x++) {
        float all = own * sum[x] + beside * (sum[x - 1] + sum[x + 1]) + beyond * (sum[x - 2] + sum[x + 2]);
        blurred[x] = all;
        lit |= all > threshold;
    }
    return lit;
}

/* Blurs a row along, in 1/65536: whole numbers below 2^24 of them, exact in whatever order they are added. Where a
 * block begins that has something above the threshold goes into lit; returns how many. sum has REACH more at either end.
 * lit: as many as there are blocks, and one. */
WIDE static int blur_along(const float *restrict sum, float *restrict blurred, int32_t *restrict lit, int width,
                           const RidgeRules *rules)
{
    const float part = 1.0f / 65536.0f, beside = part * (float)rules->inner, beyond = part * (float)rules->outer;
    const float own = part * (float)(256 - 2 * rules->inner - 2 * rules->outer), threshold = rules->threshold;
    int from = 0, found = 0;
    for (; from + BLOCK <= width; from += BLOCK) { /* each is written, and the next one over it unless it is lit */
        lit[found] = from;
        found += blur_block(sum + from, blurred + from, BLOCK, own, beside, beyond, threshold);
    }
    if (from < width) {
        lit[found] = from;
        found += blur_block(sum + from, blurred + from, width - from, own, beside, beyond, threshold);
    }
    return found;
}

#define EIGHT_BITS(k) 1u << (k), 2u << (k), 4u << (k), 8u << (k), 16u << (k), 32u << (k), 64u << (k), 128u << (k)
static const uint32_t BITS[BLOCK] = {EIGHT_BITS(0), EIGHT_BITS(8), EIGHT_BITS(16), EIGHT_BITS(24)};

/* A bit for each of the first `size` pixels of a block that is above the threshold and a local maximum along its row or
 * its column. */
static inline uint32_t tops_of_block(const float *at, int width, int size, float threshold)
{
    uint32_t bits = 0;
    for (int k = 0; k < size; k++) {
        float own = at[k];
        int along = (own >= at[k - 1]) & (own > at[k + 1]), down = (own >= at[k - width]) & (own > at[k + width]);
        bits |= (own > threshold) & (along | down) ? BITS[k] : 0;
    }
    return bits;
}

/* Pixels of a row that may be ridge points, nowhere nearer to its ends than the margin; in `blocks` of it, which begin at
 * lit. The row has neighbours. */
WIDE static void find_tops(const float *blurred, const int32_t *lit, int blocks, int row, int width,
                           const RidgeRules *rules, Tops *tops)
{
    int32_t *pixel = tops->pixel, *rows = tops->row, first = row * width;
    int found = tops->number, margin = rules->margin;
    for (int k = 0; k < blocks; k++) {
        int from = lit[k];
        const float *at = blurred + first + from;
        uint32_t bits = width - from >= BLOCK ? tops_of_block(at, width, BLOCK, rules->threshold)
                                              : tops_of_block(at, width, width - from, rules->threshold);
        for (; bits; bits &= bits - 1) {
            int column = from + __builtin_ctz(bits);
            pixel[found] = first + column;
            rows[found] = row;
            found += column >= margin && column < width - margin;
        }
    }
    tops->number = found;
}

/* Steger's test of a batch of pixels; those whose crest lies within them are added. */
WIDE static void add_crests(const float *blurred, int width, const int32_t *pixel, const int32_t *rows, int number,
                            const RidgeRules *rules, Points *points)
{
    float bxx[BATCH], byy[BATCH], bxy[BATCH], gx[BATCH], gy[BATCH], centre[BATCH];
    float cosine[BATCH], sine[BATCH], bend[BATCH], step[BATCH], x[BATCH], y[BATCH];
    uint8_t keep[BATCH];
    for (int k = 0; k < number; k++) {
        const float *at = blurred + pixel[k];
        float here = at[0], left = at[-1], right = at[1], above = at[-width], below = at[width];
        centre[k] = here;
        bxx[k] = left + right - 2.0f * here;
        byy[k] = above + below - 2.0f * here;
        bxy[k] = 0.25f * (at[-width - 1] + at[width + 1] - at[-width + 1] - at[width - 1]);
        gx[k] = 0.5f * (right - left);
        gy[k] = 0.5f * (below - above);
    }
    for (int k = 0; k < number; k++) {
        /* the eigenvector of the most negative second derivative points across the line, the other one along it;
         * sine and cosine come from those of twice the angle */
        float p = bxx[k] - byy[k], q = 2.0f * bxy[k];
        float r = sqrtf(p * p + q * q);
        float safe = r > 0.0f ? r : 1.0f;
        float c2 = r > 0.0f ? p / safe : 1.0f, s2 = q / safe;
        float large = sqrtf(0.5f * (1.0f + fabsf(c2)));
        float small = 0.5f * fabsf(s2) / large;
        float c = c2 >= 0.0f ? large : small, s = c2 >= 0.0f ? small : large;
        s = copysignf(s, s2);
        float across = bxx[k] * s * s - 2.0f * bxy[k] * s * c + byy[k] * c * c;
        float slope = gy[k] * c - gx[k] * s;
        float other = bxx[k] + byy[k] - across, least = rules->least_bend * centre[k];
        int crest = (-across > least) & (-across > other);
        float away = crest ? -slope / across : INFINITY;
        cosine[k] = c;
        sine[k] = s;
        bend[k] = -across;
        step[k] = away;
        x[k] = (float)(pixel[k] - rows[k] * width) - away * s;
        y[k] = (float)rows[k] + away * c;
        keep[k] = (uint8_t)(crest & (fabsf(away * s) <= rules->crest_px) & (fabsf(away * c) <= rules->crest_px));
    }
    for (int k = 0; k < number; k++) {
        /* each is written, and the next one over it unless it is kept; without room all are counted, so that the caller
         * comes back with enough */
        int n = points->count < points->most ? points->count : points->most;
        points->index[n] = pixel[k];
        points->x[n] = x[k];
        points->y[n] = y[k];
        points->cos[n] = cosine[k];
        points->sin[n] = sine[k];
        points->height[n] = centre[k];
        points->bend[n] = bend[k];
        points->offset[n] = step[k];
        points->count += keep[k];
    }
}

/* Ridge points of a picture (height x width) less its background, at most `most` of them, and the picture blurred: Steger's
 * test of the pixels above the threshold that are a local maximum along their row or their column. Rows are blurred and
 * searched in turn, while they are at hand. index: most + 1; columns (7, most + 1): x, y, cosine, sine, level, bend,
 * offset. Returns their number, which may be more than there was room for, or -1 without memory. */
EXPORT int edgewatch_ridges(const uint8_t *excess, int height, int width, const RidgeRules *rules, float *blurred,
                            int32_t *index, float *columns, int most)
{
    float *column[7];
    for (int k = 0; k < 7; k++)
        column[k] = columns + (size_t)k * ((size_t)most + 1);
    Points points = {index, column[0], column[1], column[2], column[3], column[4], column[5], column[6], 0, most};
    size_t room = (size_t)width + BATCH, blocks = (size_t)width / BLOCK + 2;
    float *line = malloc(sizeof(float) * ((size_t)width + 2 * REACH));
    int32_t *work = malloc(sizeof(int32_t) * 2 * room);
    uint16_t *wide = malloc(sizeof(uint16_t) * TAPS * (size_t)width); /* the rows that the blur takes in */
    int32_t *lit = malloc(sizeof(int32_t) * 2 * blocks); /* of this row and the one before */
    int answer = -1, number[2];
    if (!line || !work || !wide || !lit)
        goto done;
    Tops tops = {work, work + room, 0};
    float *sum = line + REACH;
    for (int row = 0, read = 0; row < height; row++) {
        const uint16_t *rows[TAPS];
        for (; read <= row + REACH && read < height; read++)
            widen_row(excess + (size_t)read * width, wide + (size_t)(read % TAPS) * width, width);
        for (int k = 0; k < TAPS; k++)
            rows[k] = wide + (size_t)(mirrored(row + k - REACH, height) % TAPS) * width;
        blur_down(rows, sum, width, rules);
        for (int k = 1; k <= REACH; k++) {
            sum[-k] = sum[mirrored(-k, width)];
            sum[width - 1 + k] = sum[mirrored(width - 1 + k, width)];
        }
        number[row & 1] = blur_along(sum, blurred + (size_t)row * width, lit + (row & 1) * blocks, width, rules);
        if (row <= rules->margin || row > height - rules->margin)
            continue;
        find_tops(blurred, lit + (~row & 1) * blocks, number[~row & 1], row - 1, width, rules, &tops);
        int done = 0;
        for (; tops.number - done >= BATCH; done += BATCH)
            add_crests(blurred, width, tops.pixel + done, tops.row + done, BATCH, rules, &points);
        tops.number -= done;
        memmove(tops.pixel, tops.pixel + done, sizeof(int32_t) * (size_t)tops.number);
        memmove(tops.row, tops.row + done, sizeof(int32_t) * (size_t)tops.number);
    }
    add_crests(blurred, width, tops.pixel, tops.row, tops.number, rules, &points);
    answer = points.count;
done:
    free(line);
    free(work);
    free(wide);
    free(lit);
    return answer;
}

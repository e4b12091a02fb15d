/* Ridge points of a picture: see ridges.py. */
#include "kernels.h"

enum { BATCH = 256, BLOCK = 32 };

typedef struct {
    int32_t *index;
    float *x, *y, *cos, *sin, *height, *bend, *offset;
    int count, most; /* found so far; room */
} Points;

static inline int is_top(const float *at, int width, float threshold)
{
    return (at[0] > threshold) & (((at[0] >= at[-1]) & (at[0] > at[1])) | ((at[0] >= at[-width]) & (at[0] > at[width])));
}

/* Pixels between columns `from` and `to` of a row that are above the threshold and a local maximum along their row or
 * their column; first: number of the row's first pixel. Returns how many. */
WIDE static int find_tops(const float *row, int width, int from, int to, float threshold, int first, int32_t *pixel)
{
    int found = 0, column = from;
    for (; column + BLOCK <= to; column += BLOCK) {
        const float *at = row + column;
        uint8_t top[BLOCK];
        int any = 0;
        for (int k = 0; k < BLOCK; k++)
            any |= at[k] > threshold;
        if (!any)
            continue;
        for (int k = 0; k < BLOCK; k++)
            top[k] = (uint8_t)is_top(at + k, width, threshold);
        for (int k = 0; k < BLOCK; k += 8) {
            uint64_t eight;
            memcpy(&eight, top + k, 8);
            for (int i = k; eight; i++, eight >>= 8) {
                pixel[found] = first + column + i;
                found += eight & 1;
            }
        }
    }
    for (; column < to; column++) {
        pixel[found] = first + column;
        found += is_top(row + column, width, threshold);
    }
    return found;
}

/* Steger's test of a batch of pixels; those whose crest lies within them are added. */
WIDE static void add_crests(const float *blurred, int width, const int32_t *pixel, int number, float crest_px,
                            float least_bend, Points *points)
{
    float bxx[BATCH], byy[BATCH], bxy[BATCH], gx[BATCH], gy[BATCH], centre[BATCH];
    float cosine[BATCH], sine[BATCH], bend[BATCH], step[BATCH];
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
        float other = bxx[k] + byy[k] - across, least = least_bend * centre[k];
        int crest = (-across > least) & (-across > other);
        float away = crest ? -slope / across : INFINITY;
        cosine[k] = c;
        sine[k] = s;
        bend[k] = -across;
        step[k] = away;
        keep[k] = (uint8_t)(crest & (fabsf(away * s) <= crest_px) & (fabsf(away * c) <= crest_px));
    }
    for (int k = 0; k < number; k++) {
        if (!keep[k])
            continue;
        int n = points->count++;
        if (n >= points->most)
            continue; /* counted all the same: the caller comes back with room */
        int row = pixel[k] / width, column = pixel[k] % width;
        points->index[n] = pixel[k];
        points->x[n] = (float)column - step[k] * sine[k];
        points->y[n] = (float)row + step[k] * cosine[k];
        points->cos[n] = cosine[k];
        points->sin[n] = sine[k];
        points->height[n] = centre[k];
        points->bend[n] = bend[k];
        points->offset[n] = step[k];
    }
}

/* Ridge points of blurred (height x width), nowhere nearer to its edge than margin (at least 1), at most `most` of them:
 * Steger's test of the pixels above the threshold that are a local maximum along their row or their column. columns (7,
 * most): x, y, cosine, sine, level, bend, offset. Returns their number, which may be more than there was room for, or -1
 * without memory. */
EXPORT int edgewatch_ridges(const float *blurred, int height, int width, float threshold, float crest_px,
                            float least_bend, int margin, int32_t *index, float *columns, int most)
{
    float *column[7];
    for (int k = 0; k < 7; k++)
        column[k] = columns + (size_t)k * most;
    Points points = {index, column[0], column[1], column[2], column[3], column[4], column[5], column[6], 0, most};
    int32_t *pixel = malloc(sizeof(int32_t) * ((size_t)width + BATCH));
    int number = 0;
    if (!pixel)
        return -1;
    for (int row = margin; row < height - margin; row++) {
        int done = 0;
        number += find_tops(blurred + (size_t)row * width, width, margin, width - margin, threshold, row * width,
                            pixel + number);
        for (; number - done >= BATCH; done += BATCH)
            add_crests(blurred, width, pixel + done, BATCH, crest_px, least_bend, &points);
        number -= done;
        memmove(pixel, pixel + done, sizeof(int32_t) * (size_t)number);
    }
    add_crests(blurred, width, pixel, number, crest_px, least_bend, &points);
    free(pixel);
    return points.count;
}

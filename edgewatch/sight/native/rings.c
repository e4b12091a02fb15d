/* What a picture shows about a point: see rings.py. */
#include "rings.h"
#include "kernels.h"

/* log(1 + value * scale) of values, what is below 0 taken as 0; error below 2e-5, a thousandth of the steps in which the
 * net learnt them. Polynomial of log(1 + f) / f between the square roots of a half and of two, least squares on
 * Chebyshev's nodes. */
WIDE static void compress(const float *value, float scale, float *out, int number)
{
    for (int k = 0; k < number; k++) {
        float x = 1.0f + (value[k] > 0.0f ? value[k] * scale : 0.0f);
        uint32_t bits;
        memcpy(&bits, &x, 4);
        int exponent = (int)(bits >> 23) - 127;
        bits = (bits & 0x007fffffu) | 0x3f800000u;
        float m;
        memcpy(&m, &bits, 4);
        int high = m > 1.41421356f;
        float f = (high ? 0.5f * m : m) - 1.0f;
        float y = 1.680138223e-1f;
        y = y * f - 2.720358907e-1f;
        y = y * f + 3.384127495e-1f;
        y = y * f - 4.993439143e-1f;
        y = y * f + 9.998797756e-1f;
        out[k] = y * f + 0.693147181f * (float)(exponent + high);
    }
}

WIDE static void place(float x, float y, float c, float s, const float *along, const float *aside, float *px, float *py,
                       int number)
{
    for (int k = 0; k < number; k++) {
        px[k] = x + c * along[k] - s * aside[k];
        py[k] = y + s * along[k] + c * aside[k];
    }
}

WIDE static void split(const float *px, const float *py, int width, int32_t *pixel, float *right, float *down, int number)
{
    for (int k = 0; k < number; k++) {
        int column = (int)px[k], row = (int)py[k];
        pixel[k] = row * width + column;
        right[k] = px[k] - (float)column;
        down[k] = py[k] - (float)row;
    }
}

/* Values between pairs of pixels, of an upper row and the row below it. */
WIDE static void blend(float *restrict level, const float *restrict upper, const float *restrict lower,
                       const float *restrict right, const float *restrict down, int number)
{
    for (int k = 0; k < number; k++) {
        float high = upper[2 * k] + right[k] * (upper[2 * k + 1] - upper[2 * k]);
        float low = lower[2 * k] + right[k] * (lower[2 * k + 1] - lower[2 * k]);
        level[k] = high + down[k] * (low - high);
    }
}

void read_rings(const Blurred *picture, float x, float y, float c, float s, const Places *places, float scale, float *out,
                float *work)
{
    int number = places->number, width = picture->width, height = picture->height;
    float *px = work, *py = px + number, *right = py + number, *down = right + number, *level = down + number;
    float *upper = level + number, *lower = upper + 2 * number, farthest = places->farthest;
    int32_t *pixel = (int32_t *)(lower + 2 * number);
    place(x, y, c, s, places->along, places->aside, px, py, number);
    if (x > farthest && y > farthest && x < (float)(width - 2) - farthest && y < (float)(height - 2) - farthest) {
        split(px, py, width, pixel, right, down, number);
        for (int k = 0; k < number; k++) {
            const float *p = picture->blurred + pixel[k];
            memcpy(upper + 2 * k, p, 2 * sizeof(float));
            memcpy(lower + 2 * k, p + width, 2 * sizeof(float));
        }
        blend(level, upper, lower, right, down, number);
    } else {
        for (int k = 0; k < number; k++)
            level[k] = read_level(picture->blurred, height, width, px[k], py[k]);
    }
    compress(level, scale, out, number);
}

/* The picture about each of n points (x, y), turned to the unit vectors `ahead`: out (n, places->number). Returns -1
 * without memory. */
EXPORT int edgewatch_patches(const Blurred *picture, int n, const float *at, const float *ahead, const Places *places,
                             float scale, float *out)
{
    float *work = malloc(sizeof(float) * RINGS_WORK * (size_t)places->number);
    if (!work)
        return -1;
    for (int i = 0; i < n; i++)
        read_rings(picture, at[2 * i], at[2 * i + 1], ahead[2 * i], ahead[2 * i + 1], places, scale,
                   out + (size_t)i * places->number, work);
    free(work);
    return 0;
}

WIDE static int count_near(double x, double y, int n, const double *points, double square)
{
    int near = 0;
    for (int k = 0; k < n; k++) {
        double dx = points[2 * k] - x, dy = points[2 * k + 1] - y;
        near += dx * dx + dy * dy < square;
    }
    return near;
}

int count_ends(double x, double y, int n, const double *begin, const double *end, double radius)
{
    return count_near(x, y, n, begin, radius * radius) + count_near(x, y, n, end, radius * radius);
}

/* How many ends of the n pieces lie within radius of each of m points. */
EXPORT void edgewatch_crowd(int m, const double *at, int n, const double *begin, const double *end, double radius,
                            int32_t *crowd)
{
    for (int i = 0; i < m; i++)
        crowd[i] = count_ends(at[2 * i], at[2 * i + 1], n, begin, end, radius);
}

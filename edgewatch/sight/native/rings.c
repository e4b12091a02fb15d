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

WIDE static void blend(float *level, const float *a, const float *b, const float *c, const float *d, const float *right,
                       const float *down, int number)
{
    for (int k = 0; k < number; k++) {
        float upper = a[k] + right[k] * (b[k] - a[k]), lower = c[k] + right[k] * (d[k] - c[k]);
        level[k] = upper + down[k] * (lower - upper);
    }
}

void read_rings(const Blurred *picture, float x, float y, float c, float s, const Places *places, float scale, float *out,
                float *work)
{
    int number = places->number, width = picture->width, height = picture->height;
    float *px = work, *py = px + number, *right = py + number, *down = right + number, *level = down + number;
    float *upper = level + number, *upper_right = upper + number, *lower = upper_right + number;
    float *lower_right = lower + number, farthest = places->farthest;
    int32_t *pixel = (int32_t *)(lower_right + number);
    place(x, y, c, s, places->along, places->aside, px, py, number);
    if (x > farthest && y > farthest && x < (float)(width - 2) - farthest && y < (float)(height - 2) - farthest) {
        split(px, py, width, pixel, right, down, number);
        for (int k = 0; k < number; k++) {
            const float *p = picture->blurred + pixel[k];
            upper[k] = p[0];
            upper_right[k] = p[1];
            lower[k] = p[width];
            lower_right[k] = p[width + 1];
        }
        blend(level, upper, upper_right, lower, lower_right, right, down, number);
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

int count_ends(double x, double y, int n, const double *begin, const double *end, double radius, int enough)
{
    int ends = 0;
    for (int k = 0; k < 2 * n && ends < enough; k++) {
        const double *p = k < n ? begin + 2 * k : end + 2 * (k - n);
        ends += (p[0] - x) * (p[0] - x) + (p[1] - y) * (p[1] - y) < radius * radius;
    }
    return ends;
}

/* How many ends of the n pieces lie within radius of each of m points. */
EXPORT void edgewatch_crowd(int m, const double *at, int n, const double *begin, const double *end, double radius,
                            int32_t *crowd)
{
    for (int i = 0; i < m; i++)
        crowd[i] = count_ends(at[2 * i], at[2 * i + 1], n, begin, end, radius, INT32_MAX);
}

/* What a picture shows about a point: see rings.py. */
#include "rings.h"
#include "kernels.h"

/* log(1 + value * scale), what is below 0 taken as 0; error below 2e-5, a thousandth of the steps in which the net learnt
 * them. Polynomial of log(1 + f) / f between the square roots of a half and of two, least squares on Chebyshev's nodes. */
static inline float compress(float value, float scale)
{
    float x = 1.0f + (value > 0.0f ? value * scale : 0.0f);
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
    return y * f + 0.693147181f * (float)(exponent + high);
}

/* Between which pixels the places about (x, y) lie, all within the picture: upper left pixel, and how far right and down. */
WIDE static void aim(float x, float y, float c, float s, const float *restrict along, const float *restrict aside, int width,
                     int32_t *restrict pixel, float *restrict right, float *restrict down, int number)
{
    for (int k = 0; k < number; k++) {
        float px = x + c * along[k] - s * aside[k], py = y + s * along[k] + c * aside[k];
        int column = (int)px, row = (int)py;
        pixel[k] = row * width + column;
        right[k] = px - (float)column;
        down[k] = py - (float)row;
    }
}

/* Values between pairs of pixels, of an upper row and the row below it. */
WIDE static void blend(const float *restrict upper, const float *restrict lower, const float *restrict right,
                       const float *restrict down, float scale, float *restrict out, int number)
{
    for (int k = 0; k < number; k++) {
        float high = upper[2 * k] + right[k] * (upper[2 * k + 1] - upper[2 * k]);
        float low = lower[2 * k] + right[k] * (lower[2 * k + 1] - lower[2 * k]);
        out[k] = compress(high + down[k] * (low - high), scale);
    }
}

enum { AT_ONCE = 128 }; /* places, whose work stays in the nearest cache */

void read_rings(const Blurred *picture, float x, float y, float c, float s, const Places *places, float scale, float *out)
{
    float right[AT_ONCE], down[AT_ONCE], upper[2 * AT_ONCE], lower[2 * AT_ONCE], farthest = places->farthest;
    int32_t pixel[AT_ONCE];
    int width = picture->width, height = picture->height;
    int inside = x > farthest && y > farthest && x < (float)(width - 2) - farthest && y < (float)(height - 2) - farthest;
    for (int from = 0; from < places->number; from += AT_ONCE) {
        int number = places->number - from < AT_ONCE ? places->number - from : AT_ONCE;
        const float *along = places->along + from, *aside = places->aside + from;
        if (inside) {
            aim(x, y, c, s, along, aside, width, pixel, right, down, number);
            for (int k = 0; k < number; k++) {
                const float *p = picture->blurred + pixel[k];
                memcpy(upper + 2 * k, p, 2 * sizeof(float));
                memcpy(lower + 2 * k, p + width, 2 * sizeof(float));
            }
            blend(upper, lower, right, down, scale, out + from, number);
        } else {
            for (int k = 0; k < number; k++)
                out[from + k] = compress(read_level(picture->blurred, height, width, x + c * along[k] - s * aside[k],
                                                    y + s * along[k] + c * aside[k]), scale);
        }
    }
}

/* The picture about each of n points (x, y), turned to the unit vectors `ahead`: out (n,
 * places->number). */
EXPORT void edgewatch_patches(const Blurred *picture, int n, const float *at, const float *ahead, const Places *places,
                             float scale, float *out)
{
    for (int i = 0; i < n; i++)
        read_rings(picture, at[2 * i], at[2 * i + 1], ahead[2 * i], ahead[2 * i + 1], places, scale,
                   out + (size_t)i * places->number);
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

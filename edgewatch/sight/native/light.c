/* Pixels at full scale, and the width of lines: see light.py. */
#include "kernels.h"

typedef struct {
    const float *blurred;
    int32_t height, width;
} Picture;

typedef struct {
    double least_length_px, profile_px, step_px, least_top;
    const double *parts;
    int32_t part_count, samples, most_lines;
} WidthRules;

WIDE static int brightest(const uint8_t *row, int width)
{
    uint8_t most = 0;
    for (int x = 0; x < width; x++)
        most = row[x] > most ? row[x] : most;
    return most;
}

/* Of every step-th pixel each way, in how many places two by two of them are at full scale. */
EXPORT int edgewatch_full(const uint8_t *picture, int height, int width, int step, int full)
{
    int patches = 0, before = 0;
    for (int y = 0; y < height; y += step) {
        const uint8_t *row = picture + (ptrdiff_t)y * width, *above = row - (ptrdiff_t)step * width;
        int here = brightest(row, width) >= full;
        for (int x = step; x < width && here && before; x += step)
            patches += row[x] >= full && row[x - step] >= full && above[x] >= full && above[x - step] >= full;
        before = here;
    }
    return patches;
}

enum { MOST_PARTS = 15, MOST_SAMPLES = 255 };

/* Sorts two rows value by value, so that the lower has what is less. */
WIDE static void exchange(float *restrict lower, float *restrict upper, int n)
{
    for (int k = 0; k < n; k++) {
        float a = lower[k], b = upper[k];
        lower[k] = a < b ? a : b;
        upper[k] = a < b ? b : a;
    }
}

/* Profile across a line: at each distance beside it the median over its parts, an odd number of them. */
static const float *profile_of(const double *begin, const double *gap, double length, const Picture *picture,
                               const WidthRules *rules, float levels[MOST_PARTS][MOST_SAMPLES])
{
    double ux = gap[0] / length, uy = gap[1] / length;
    for (int p = 0; p < rules->part_count; p++) {
        double x = begin[0] + rules->parts[p] * gap[0], y = begin[1] + rules->parts[p] * gap[1];
        for (int k = 0; k < rules->samples; k++) {
            double side = k * rules->step_px - rules->profile_px;
            levels[p][k] = read_level(picture->blurred, picture->height, picture->width, (float)(x - side * uy),
                                      (float)(y + side * ux));
        }
    }
    for (int last = rules->part_count - 1; last > 0; last--) /* all samples at once, and no branch to guess */
        for (int p = 0; p < last; p++)
            exchange(levels[p], levels[p + 1], rules->samples);
    return levels[rules->part_count / 2];
}

/* Width (px) of n lines where profiles across them fall to half, of the narrower half but for the narrowest. Returns of how
 * many lines it is, those that stand clear. */
EXPORT int edgewatch_width(int n, const double *begin, const double *end, const Picture *picture, const WidthRules *rules,
                           double *across)
{
    float levels[MOST_PARTS][MOST_SAMPLES];
    int counts[MOST_SAMPLES + 1] = {0}, chosen = 0, clear = 0;
    *across = NAN;
    if (rules->part_count > MOST_PARTS || rules->samples > MOST_SAMPLES)
        return 0;
    for (int i = 0; i < n && chosen < rules->most_lines; i++) {
        double gap[2] = {end[2 * i] - begin[2 * i], end[2 * i + 1] - begin[2 * i + 1]};
        double length = sqrt(gap[0] * gap[0] + gap[1] * gap[1]);
        if (!(length > rules->least_length_px))
            continue;
        chosen++;
        const float *profile = profile_of(begin + 2 * i, gap, length, picture, rules, levels);
        float top = profile[0];
        int wide = 0;
        for (int k = 1; k < rules->samples; k++)
            top = profile[k] > top ? profile[k] : top;
        if (!((double)top > rules->least_top))
            continue;
        for (int k = 0; k < rules->samples; k++)
            wide += profile[k] >= 0.5f * top;
        counts[wide]++;
        clear++;
    }
    int from = clear / 8, to = (clear + 1) / 2 > 1 ? (clear + 1) / 2 : 1, at = 0;
    double sum = 0.0;
    for (int wide = 0; wide <= rules->samples && clear; wide++)
        for (int k = 0; k < counts[wide]; k++, at++)
            sum += at >= from && at < to ? wide : 0;
    if (clear)
        *across = sum * rules->step_px / (to - from);
    return clear;
}

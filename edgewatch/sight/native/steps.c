/* Steps of brightness along straight pieces: see steps.py. */
#include "steps.h"

/* So near (px) to the picture's last row or column single precision may round a point onto it. */
static const double HAIR = 0.01;

enum { BLOCK = 64 };

WIDE void read_line(const Picture *picture, const double *from, const double *along, double first, double apart, int n,
                    float *level)
{
    double last = first + (n - 1) * apart, x = from[0], y = from[1], ux = along[0], uy = along[1];
    double x0 = x + first * ux, x1 = x + last * ux, y0 = y + first * uy, y1 = y + last * uy;
    double right = picture->width - 1 - HAIR, low = picture->height - 1 - HAIR;
    if (!(x0 >= 0.0 && x1 >= 0.0 && y0 >= 0.0 && y1 >= 0.0 && x0 < right && x1 < right && y0 < low && y1 < low)) {
        for (int k = 0; k < n; k++) {
            double place = first + k * apart;
            level[k] = read(picture, x + place * ux, y + place * uy);
        }
        return;
    }
    /* All between four pixels: as read_level, without its cases, and in loops that become vector code but for the pixels. */
    int width = picture->width;
    for (int from_k = 0; from_k < n; from_k += BLOCK) {
        int size = n - from_k < BLOCK ? n - from_k : BLOCK;
        int32_t at[BLOCK];
        float aside[BLOCK], down[BLOCK], pixels[4][BLOCK];
        for (int k = 0; k < size; k++) {
            double place = first + (from_k + k) * apart;
            float px = (float)(x + place * ux), py = (float)(y + place * uy);
            int column = (int)px, row = (int)py;
            at[k] = row * width + column;
            aside[k] = px - (float)column;
            down[k] = py - (float)row;
        }
        for (int k = 0; k < size; k++) {
            const float *pixel = picture->blurred + at[k];
            pixels[0][k] = pixel[0];
            pixels[1][k] = pixel[1];
            pixels[2][k] = pixel[width];
            pixels[3][k] = pixel[width + 1];
        }
        for (int k = 0; k < size; k++) {
            float upper = pixels[0][k] + aside[k] * (pixels[1][k] - pixels[0][k]);
            float lower = pixels[2][k] + aside[k] * (pixels[3][k] - pixels[2][k]);
            level[from_k + k] = upper + down[k] * (lower - upper);
        }
    }
}

/* The rise of brightness at samples from `box` on, and which from `first` to `last` rise above noise and are no less than the
 * ones before and behind. Returns their number. total: sums before each sample. */
WIDE static int find_peaks(const double *restrict total, int size, int box, int first, int last, double noise_dn,
                           double *restrict rise, int32_t *restrict is, int32_t *restrict peak)
{
    double part = 1.0 / box;
    for (int k = box; k < size - box; k++)
        rise[k] = (total[k + box + 1] - total[k + 1] - total[k] + total[k - box]) * part;
    for (int k = first; k <= last; k++) {
        double here = rise[k], before = rise[k - 1], after = rise[k + 1];
        is[k] = ((here > noise_dn) & (here >= before) & (here >= after)) |
                ((-here > noise_dn) & (here <= before) & (here <= after));
    }
    int number = 0;
    for (int k = first; k <= last; k++) {
        peak[number] = k;
        number += is[k];
    }
    return number;
}

/* The step at a peak of the rise, whose neighbours are given, or 0 when it is none. */
static int step_at(const double *rise, double ahead, double behind, const StepRules *rules, double *height, double *shift,
                   double *share)
{
    double high = ahead > behind ? ahead : behind, sign = *rise > 0.0 ? 1.0 : -1.0, here = fabs(*rise);
    if (!(here > rules->share * high))
        return 0;
    for (int aside = 2; aside <= 3; aside++)
        if (!(here >= rise[aside] * sign && here >= rise[-aside] * sign))
            return 0;
    double before = fabs(rise[-1]), after = fabs(rise[1]), curve = before - 2.0 * here + after;
    curve = curve < -1e-9 ? curve : -1e-9;
    double off = 0.5 * (before - after) / curve;
    *shift = off < -0.5 ? -0.5 : off > 0.5 ? 0.5 : off;
    *height = here;
    *share = here / (high > 1e-9 ? high : 1e-9);
    return 1;
}

/* Steps along pieces, for streams along (ax, ay), with room for `most`. Returns their number, which may be more than
 * `most`, or -1 without memory. */
EXPORT int edgewatch_steps(const Pieces *pieces, double ax, double ay, const Picture *picture, double noise,
                           const StepRules *rules, Step *steps, int most)
{
    int margin = rules->beyond_px + 2 * rules->box_px, box = rules->box_px, found = 0;
    double longest = 0.0, part = 1.0 / box, noise_dn = rules->noise * noise;
    for (int i = 0; i < pieces->number; i++)
        longest = pieces->length[i] > longest ? pieces->length[i] : longest;
    size_t room = (size_t)whole_above(longest) + 2 + 2 * (size_t)margin;
    double *total = malloc((2 * sizeof(double) + sizeof(float) + 2 * sizeof(int32_t)) * room + sizeof(double));
    if (!total)
        return -1;
    double *rise = total + room + 1;
    float *level = (float *)(rise + room);
    int32_t *is = (int32_t *)(level + room), *peak = is + room;
    for (int i = 0; i < pieces->number; i++) {
        if (pieces->points[i] < rules->least_points)
            continue;
        const double *axis = pieces->axis + 2 * i;
        int back = axis[0] * ax + axis[1] * ay < 0.0, size = whole_above(pieces->length[i]) + 1 + 2 * margin;
        double unit[2] = {back ? -axis[0] : axis[0], back ? -axis[1] : axis[1]};
        const double *start = (back ? pieces->end : pieces->begin) + 2 * i;
        read_line(picture, start, unit, -margin, 1.0, size, level);
        total[0] = 0.0;
        for (int k = 0; k < size; k++)
            total[k + 1] = total[k] + level[k];
        int last = margin + (int)(pieces->length[i] + rules->beyond_px);
        int peaks = find_peaks(total, size, box, margin - rules->beyond_px, last, noise_dn, rise, is, peak);
        for (int j = 0; j < peaks; j++) {
            int k = peak[j];
            double ahead = (total[k + box + 1] - total[k + 1]) * part, behind = (total[k] - total[k - box]) * part;
            double height, shift, share;
            if (!step_at(rise + k, ahead, behind, rules, &height, &shift, &share))
                continue;
            if (found < most) {
                double place = (double)(k - margin) + shift, sign = rise[k] > 0.0 ? 1.0 : -1.0;
                steps[found] = (Step){{start[0] + unit[0] * place, start[1] + unit[1] * place},
                                      {unit[0] * sign, unit[1] * sign},
                                      height,
                                      pieces->length[i],
                                      share,
                                      rise[k] > 0.0};
            }
            found++;
        }
    }
    free(total);
    return found;
}

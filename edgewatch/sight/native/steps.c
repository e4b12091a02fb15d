/* Steps of brightness along straight pieces: see steps.py. */
#include "steps.h"

/* So near (px) to the picture's last row or column single precision may round a point onto it. */
static const double HAIR = 0.01;

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
    const float *blurred = picture->blurred;
    int width = picture->width;
    for (int k = 0; k < n; k++) { /* all between four pixels: as read_level, without its cases */
        double place = first + k * apart;
        float px = (float)(x + place * ux), py = (float)(y + place * uy);
        int column = (int)px, row = (int)py, at = row * width + column;
        float aside = px - (float)column, down = py - (float)row;
        float upper = blurred[at] + aside * (blurred[at + 1] - blurred[at]);
        float lower = blurred[at + width] + aside * (blurred[at + width + 1] - blurred[at + width]);
        level[k] = upper + down * (lower - upper);
    }
}

/* The step at sample k of a piece, whose rise and neighbours are given, or 0 when it is none. */
static int step_at(const double *rise, double ahead, double behind, double noise_dn, const StepRules *rules, double *height,
                   double *shift, double *share)
{
    double high = ahead > behind ? ahead : behind, sign = *rise > 0.0 ? 1.0 : -1.0, here = fabs(*rise);
    if (!(here > rules->share * high && here > noise_dn))
        return 0;
    for (int aside = 1; aside <= 3; aside++)
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
    double *total = malloc((2 * sizeof(double) + sizeof(float)) * room + sizeof(double));
    if (!total)
        return -1;
    double *rise = total + room + 1;
    float *level = (float *)(rise + room);
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
        for (int k = box; k < size - box; k++)
            rise[k] = (total[k + box + 1] - total[k + 1] - total[k] + total[k - box]) * part;
        int last = margin + (int)(pieces->length[i] + rules->beyond_px);
        for (int k = margin - rules->beyond_px; k <= last; k++) {
            if (!(fabs(rise[k]) > noise_dn))
                continue;
            double ahead = (total[k + box + 1] - total[k + 1]) * part, behind = (total[k] - total[k - box]) * part;
            double height, shift, share;
            if (!step_at(rise + k, ahead, behind, noise_dn, rules, &height, &shift, &share))
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

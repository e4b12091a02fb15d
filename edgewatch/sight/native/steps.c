/* Steps of brightness along straight pieces: see steps.py. */
#include "steps.h"

typedef struct {
    double least_height, share;
    int32_t least_points, beyond_px, box_px;
} StepRules;

/* Steps along n pieces, for streams along (ax, ay). Out, with room for `most`: ends (2, most, 2), places and unit vectors
 * inwards; values (3, most), height, size and share; begins. Returns their number, which may be more than `most`, or -1 without
 * memory. */
EXPORT int edgewatch_steps(int n, const double *begin, const double *end, const double *axis, const double *length,
                           const int64_t *points, double ax, double ay, const Picture *picture, const StepRules *rules,
                           double *ends, double *values, uint8_t *begins, int most)
{
    double *at = ends, *inward = ends + 2 * (size_t)most, *heights = values, *sizes = values + most;
    double *shares = sizes + most;
    int margin = rules->beyond_px + 2 * rules->box_px, box = rules->box_px, longest = 0, found = 0;
    for (int i = 0; i < n; i++)
        longest = ceil(length[i]) > longest ? (int)ceil(length[i]) : longest;
    size_t room = (size_t)longest + 2 + 2 * (size_t)margin;
    double *total = malloc(sizeof(double) * (2 * room + 1));
    if (!total)
        return -1;
    double *rise = total + room + 1;
    for (int i = 0; i < n; i++) {
        if (points[i] < rules->least_points)
            continue;
        int back = axis[2 * i] * ax + axis[2 * i + 1] * ay < 0.0;
        double ux = back ? -axis[2 * i] : axis[2 * i], uy = back ? -axis[2 * i + 1] : axis[2 * i + 1];
        const double *start = back ? end + 2 * i : begin + 2 * i;
        int size = (int)ceil(length[i]) + 1 + 2 * margin;
        total[0] = 0.0;
        for (int k = 0; k < size; k++) {
            double place = (double)(k - margin);
            total[k + 1] = total[k] + read(picture, start[0] + ux * place, start[1] + uy * place);
        }
        for (int k = box; k < size - box; k++)
            rise[k] = (total[k + box + 1] - total[k + 1] - total[k] + total[k - box]) / box;
        int last = margin + (int)floor(length[i] + rules->beyond_px);
        for (int k = margin - rules->beyond_px; k <= last; k++) {
            double ahead = (total[k + box + 1] - total[k + 1]) / box, behind = (total[k] - total[k - box]) / box;
            double high = ahead > behind ? ahead : behind, height = fabs(rise[k]);
            double least = rules->share * high > rules->least_height ? rules->share * high : rules->least_height;
            if (!(height > least))
                continue;
            double sign = rise[k] > 0.0 ? 1.0 : -1.0;
            int peak = 1;
            for (int aside = 1; aside <= 3; aside++)
                peak &= height >= rise[k + aside] * sign && height >= rise[k - aside] * sign;
            if (!peak)
                continue;
            if (found < most) {
                double before = fabs(rise[k - 1]), after = fabs(rise[k + 1]);
                double curve = fmin(before - 2.0 * height + after, -1e-9);
                double shift = fmax(-0.5, fmin(0.5, 0.5 * (before - after) / curve));
                double place = (double)(k - margin) + shift;
                at[2 * found] = start[0] + ux * place;
                at[2 * found + 1] = start[1] + uy * place;
                inward[2 * found] = ux * sign;
                inward[2 * found + 1] = uy * sign;
                heights[found] = height;
                sizes[found] = length[i];
                begins[found] = rise[k] > 0.0;
                shares[found] = height / (high > 1e-9 ? high : 1e-9);
            }
            found++;
        }
    }
    free(total);
    return found;
}

/* Where lines come from: see steadiness.py. */
#include "steadiness.h"
#include "ranks.h"

int read_origin(int n, const double *lines, const OriginRules *rules, double *offset_px, double *error_px)
{
    size_t room = (size_t)rules->nearest_lines + 1;
    double *place = malloc(2 * sizeof(double) * room), *offset = place + room;
    int kept = 0;
    if (!place)
        return -1;
    for (int i = 0; i < n; i++) {
        double bx = lines[4 * i] - rules->contact_x, by = lines[4 * i + 1] - rules->contact_y;
        double rx = lines[4 * i + 2] - lines[4 * i], ry = lines[4 * i + 3] - lines[4 * i + 1];
        double length = sqrt(rx * rx + ry * ry), along = rx * rules->axis_x + ry * rules->axis_y;
        double cosine = along / (length > 1e-9 ? length : 1e-9), at = bx * rules->axis_x + by * rules->axis_y;
        if (!(cosine > rules->least_cosine && at > -length))
            continue;
        int k = kept; /* the nearest so far, sorted by their place */
        for (; k > 0 && place[k - 1] > at; k--) {
            place[k] = place[k - 1];
            offset[k] = offset[k - 1];
        }
        place[k] = at;
        offset[k] = (rx * by - ry * bx) / (length * cosine);
        kept += kept < rules->nearest_lines;
    }
    *offset_px = *error_px = NAN;
    if (kept > 0 && kept >= rules->least_lines) {
        double centre = middle_of(offset, kept);
        for (int k = 0; k < kept; k++)
            offset[k] = fabs(offset[k] - centre);
        *offset_px = centre;
        *error_px = rules->median_error * rules->mad_to_sigma * middle_of(offset, kept) / sqrt(kept);
    }
    free(place);
    return 0;
}

/* Ridge points linked to straight pieces, and lines fitted to them: see segments.py. */
#include "kernels.h"

static int32_t root_of(int32_t *parent, int32_t point)
{
    while (parent[point] != point) {
        parent[point] = parent[parent[point]];
        point = parent[point];
    }
    return point;
}

static void join_roots(int32_t *parent, int32_t i, int32_t j)
{
    int32_t a = root_of(parent, i), b = root_of(parent, j);
    if (a < b)
        parent[a] = b;
    else
        parent[b] = a;
}

enum { ROWS = 3 }; /* a point is linked to others of its row and of the two below */

/* Which points are linked: of each, a later one or itself. A point is looked at with those that are up to along[k] columns from
 * it in the k-th row below, as far as direction and position agree. Returns -1 without memory, otherwise 0. */
static int link_points(int count, const int32_t *index, const float *x, const float *y, const float *cosine,
                       const float *sine, int width, const int32_t *along, float least_cos, float most_off,
                       int32_t *parent)
{
    int reach = along[0];
    for (int k = 1; k < ROWS; k++)
        reach = along[k] > reach ? along[k] : reach;
    size_t across = (size_t)width + 2 * (size_t)reach, most = (size_t)width * ROWS * (2 * (size_t)reach + 1) + 1;
    int32_t *numbers = malloc(sizeof(int32_t) * (ROWS * across + 2 * most));
    if (!numbers)
        return -1;
    int32_t *one = numbers + ROWS * across, *other = one + most;
    memset(numbers, -1, sizeof(int32_t) * ROWS * across); /* of the points in these rows, -1 where there is none */
    for (int i = 0, ahead = 0, row = count ? index[0] / width : 0; i < count; row++) {
        for (; ahead < count && index[ahead] < (row + ROWS) * width; ahead++) {
            int32_t line = index[ahead] / width;
            numbers[(size_t)(line % ROWS) * across + reach + index[ahead] - line * width] = ahead;
        }
        int32_t *own = numbers + (row % ROWS) * across + reach - row * width;
        const int32_t *next = numbers + ((row + 1) % ROWS) * across + reach - row * width;
        const int32_t *after = numbers + ((row + 2) % ROWS) * across + reach - row * width;
        int begin = i, pairs = 0, good = 0;
        for (; i < count && index[i] < (row + 1) * width; i++) {
            int32_t at = index[i];
            /* each is written, and the next one over it where there is no point */
            for (int k = 1; k <= along[0]; k++) {
                one[pairs] = i;
                pairs += (other[pairs] = own[at + k]) >= 0;
            }
            for (int k = -along[1]; k <= along[1]; k++) {
                one[pairs] = i;
                pairs += (other[pairs] = next[at + k]) >= 0;
            }
            for (int k = -along[2]; k <= along[2]; k++) {
                one[pairs] = i;
                pairs += (other[pairs] = after[at + k]) >= 0;
            }
        }
        for (int k = begin; k < i; k++)
            own[index[k]] = -1;
        for (int k = 0; k < pairs; k++) {
            int32_t a = one[k], b = other[k];
            float gx = x[b] - x[a], gy = y[b] - y[a];
            one[good] = a;
            other[good] = b;
            good += (fabsf(cosine[a] * cosine[b] + sine[a] * sine[b]) >= least_cos) &
                    (fabsf(gx * sine[a] - gy * cosine[a]) <= most_off) &
                    (fabsf(gx * sine[b] - gy * cosine[b]) <= most_off);
        }
        for (int k = 0; k < good; k++)
            join_roots(parent, one[k], other[k]);
    }
    free(numbers);
    return 0;
}

/* Straight pieces of `count` ridge points, whose pixels rise; columns as edgewatch_ridges left them, `stride` apart. A point
 * is linked to those up to along[k] columns from it in the k-th row below. work: 3 * count. Out, with room for
 * count / least_points: ends (3, room, 2), begin, end and axis; values (4, room), length, height, bend and spread. Returns
 * how many, or -1 without memory. */
EXPORT int edgewatch_segments(int count, const int32_t *index, const float *columns, int stride, int width,
                              const int32_t *along, float least_cos, float most_off, int least_points, int32_t *work,
                              double *ends, double *values, int64_t *points, int room)
{
    const float *x = columns, *y = x + stride, *cosine = y + stride, *sine = cosine + stride, *level = sine + stride;
    const float *bend = level + stride;
    double *begin = ends, *end = begin + 2 * (size_t)room, *axis = end + 2 * (size_t)room;
    double *length = values, *height = length + room, *curve = height + room, *spread = curve + room;
    int32_t *parent = work, *piece = work + count, *size = work + 2 * (size_t)count;
    for (int i = 0; i < count; i++) {
        parent[i] = i;
        size[i] = 0;
    }
    if (link_points(count, index, x, y, cosine, sine, width, along, least_cos, most_off, parent) < 0)
        return -1;
    for (int i = count - 1; i >= 0; i--) /* a parent comes later, so it has its root already */
        size[parent[i] = parent[parent[i]]]++;
    int n = 0; /* pieces are numbered in the order of their last point */
    for (int i = 0; i < count; i++)
        piece[i] = parent[i] == i && size[i] >= least_points ? n++ : -1;
    double *sum = calloc(7 * (size_t)(n ? n : 1), sizeof(double));
    if (!sum)
        return -1;
    for (int i = 0; i < count; i++) {
        int own = piece[i] = piece[parent[i]];
        if (own < 0)
            continue;
        double px = x[i], py = y[i], *s = sum + 7 * (size_t)own;
        s[0] += px;
        s[1] += py;
        s[2] += px * px;
        s[3] += py * py;
        s[4] += px * py;
        s[5] += level[i];
        s[6] += bend[i];
    }
    for (int i = 0; i < count; i++) /* a root's piece is overwritten with itself above, so sizes can move over now */
        if (parent[i] == i && piece[i] >= 0)
            points[piece[i]] = size[i];
    for (int k = 0; k < n; k++) {
        double *s = sum + 7 * (size_t)k, share = 1.0 / (double)points[k];
        double mx = s[0] * share, my = s[1] * share;
        double sxx = s[2] * share - mx * mx, syy = s[3] * share - my * my, sxy = s[4] * share - mx * my;
        /* the direction from the cosine and sine of twice its angle */
        double p = sxx - syy, q = 2.0 * sxy, r = sqrt(p * p + q * q);
        double c2 = r > 0.0 ? p / r : 1.0, s2 = r > 0.0 ? q / r : 0.0;
        double large = sqrt(0.5 * (1.0 + fabs(c2))), small = 0.5 * fabs(s2) / large;
        double off = 0.5 * (sxx + syy) - 0.5 * r;
        axis[2 * k] = c2 >= 0.0 ? large : small;
        axis[2 * k + 1] = copysign(c2 >= 0.0 ? small : large, q);
        height[k] = s[5] * share;
        curve[k] = s[6] * share;
        spread[k] = off > 0.0 ? sqrt(off) : 0.0;
        s[0] = mx;
        s[1] = my;
        s[2] = INFINITY; /* from here on the lowest and highest place along the line */
        s[3] = -INFINITY;
    }
    for (int i = 0; i < count; i++) {
        int own = piece[i];
        if (own < 0)
            continue;
        double *s = sum + 7 * (size_t)own;
        double along = (double)x[i] * axis[2 * own] + (double)y[i] * axis[2 * own + 1];
        s[2] = along < s[2] ? along : s[2];
        s[3] = along > s[3] ? along : s[3];
    }
    for (int k = 0; k < n; k++) {
        const double *s = sum + 7 * (size_t)k;
        double c = axis[2 * k], d = axis[2 * k + 1], middle = s[0] * c + s[1] * d;
        double low = s[2] - middle, high = s[3] - middle;
        begin[2 * k] = s[0] + c * low;
        begin[2 * k + 1] = s[1] + d * low;
        end[2 * k] = s[0] + c * high;
        end[2 * k + 1] = s[1] + d * high;
        length[k] = high - low;
    }
    free(sum);
    return n;
}

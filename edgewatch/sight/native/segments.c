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

/* A point is linked to those of its neighbours (columns, rows away) that are points. */
enum { ROWS = 3, REACH = 2, NEIGHBOURS = 10, BATCH = 512 };
static const int NEIGHBOUR[NEIGHBOURS][2] = {{1, 0}, {2, 0}, {-2, 1}, {-1, 1}, {0, 1},
                                             {1, 1}, {2, 1}, {-1, 2}, {0, 2},  {1, 2}};

/* Links those of some pairs of points whose direction and position agree; the pairs are used up. */
static void link_pairs(const float *x, const float *y, const float *cosine, const float *sine, float least_cos,
                       float most_off, int32_t *one, int32_t *other, int pairs, int32_t *parent)
{
    int good = 0;
    for (int k = 0; k < pairs; k++) {
        int32_t i = one[k], j = other[k];
        float gx = x[j] - x[i], gy = y[j] - y[i];
        one[good] = i;
        other[good] = j;
        good += (fabsf(cosine[i] * cosine[j] + sine[i] * sine[j]) >= least_cos) &
                (fabsf(gx * sine[i] - gy * cosine[i]) <= most_off) &
                (fabsf(gx * sine[j] - gy * cosine[j]) <= most_off);
    }
    for (int k = 0; k < good; k++) {
        int32_t a = parent[one[k]], b = parent[other[k]];
        if (a == b)
            continue;
        a = root_of(parent, a);
        b = root_of(parent, b);
        int32_t low = a < b ? a : b, high = a < b ? b : a;
        parent[low] = parent[one[k]] = parent[other[k]] = high;
    }
}

/* Links `count` points, whose pixels rise: each has a later one as parent, or itself. Returns -1 without memory, otherwise
 * 0. */
static int link_points(int count, const int32_t *index, const float *x, const float *y, const float *cosine,
                       const float *sine, int width, float least_cos, float most_off, int32_t *parent)
{
    size_t across = (size_t)width + 2 * REACH, most = BATCH + NEIGHBOURS;
    int32_t *numbers = malloc(sizeof(int32_t) * (ROWS * across + 2 * most));
    if (!numbers)
        return -1;
    int32_t *one = numbers + ROWS * across, *other = one + most;
    int row = count ? index[0] / width : 0, read = row, pairs = 0;
    memset(numbers, -1, sizeof(int32_t) * ROWS * across); /* of the points in these rows, -1 where there is none */
    for (int i = 0, ahead = 0; i < count; row++) {
        for (; read < row + ROWS; read++) {
            int32_t *line = numbers + (size_t)(read % ROWS) * across + REACH, first = read * width;
            for (; ahead < count && index[ahead] < first + width; ahead++)
                line[index[ahead] - first] = ahead;
        }
        int32_t *line[ROWS], first = row * width, begin = i;
        for (int k = 0; k < ROWS; k++)
            line[k] = numbers + (size_t)((row + k) % ROWS) * across + REACH;
        for (; i < count && index[i] < first + width; i++) {
            int32_t column = index[i] - first;
            for (int k = 0; k < NEIGHBOURS; k++) { /* each is written, and the next one over it where there is no point */
                int32_t number = line[NEIGHBOUR[k][1]][column + NEIGHBOUR[k][0]];
                one[pairs] = i;
                other[pairs] = number;
                pairs += number >= 0;
            }
            if (pairs >= BATCH) {
                link_pairs(x, y, cosine, sine, least_cos, most_off, one, other, pairs, parent);
                pairs = 0;
            }
        }
        for (; begin < i; begin++)
            line[0][index[begin] - first] = -1;
    }
    link_pairs(x, y, cosine, sine, least_cos, most_off, one, other, pairs, parent);
    free(numbers);
    return 0;
}

/* Straight pieces of `count` ridge points, whose pixels rise; columns as edgewatch_ridges left them, `stride` apart. work:
 * 3 * count. Out, with room for count / least_points + 1: ends (3, room, 2), begin, end and axis; values (4, room), length,
 * height, bend and spread. Returns how many, or -1 without memory. */
EXPORT int edgewatch_segments(int count, const int32_t *index, const float *columns, int stride, int width,
                              float least_cos, float most_off, int least_points, int32_t *work, double *ends,
                              double *values, int64_t *points, int room)
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
    if (link_points(count, index, x, y, cosine, sine, width, least_cos, most_off, parent) < 0)
        return -1;
    for (int i = count - 1; i >= 0; i--) /* a parent comes later, so it has its root already */
        size[parent[i] = parent[parent[i]]]++;
    int n = 0; /* pieces are numbered in the order of their last point; each is written, and the next one over it if it is
                * none */
    for (int i = 0; i < count; i++) {
        int own = (parent[i] == i) & (size[i] >= least_points);
        piece[i] = own ? n : -1;
        points[n] = size[i];
        n += own;
    }
    double *sum = calloc(7 * ((size_t)n + 1), sizeof(double)); /* after the last piece, of all that is in none */
    if (!sum)
        return -1;
    axis[2 * n] = axis[2 * n + 1] = 0.0;
    for (int i = count - 1; i >= 0; i--) { /* a piece is asked for by its last point first */
        int own = piece[parent[i]];
        piece[i] = own < 0 ? n : own;
    }
    for (int i = 0; i < count; i++) {
        double px = x[i], py = y[i], *s = sum + 7 * (size_t)piece[i];
        s[0] += px;
        s[1] += py;
        s[2] += px * px;
        s[3] += py * py;
        s[4] += px * py;
        s[5] += level[i];
        s[6] += bend[i];
    }
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

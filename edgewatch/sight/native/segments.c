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

static void link_pair(const float *x, const float *y, const float *cosine, const float *sine, float least_cos,
                      float most_off, int32_t *parent, int32_t i, int32_t j)
{
    float gx = x[j] - x[i], gy = y[j] - y[i];
    if (fabsf(cosine[i] * cosine[j] + sine[i] * sine[j]) < least_cos ||
        fabsf(gx * sine[i] - gy * cosine[i]) > most_off || fabsf(gx * sine[j] - gy * cosine[j]) > most_off)
        return;
    int32_t a = root_of(parent, i), b = root_of(parent, j);
    if (a < b)
        parent[a] = b;
    else
        parent[b] = a;
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
    for (int i = 0, below = 0, second = 0; i < count; i++) {
        int32_t here = index[i], next = here + width, after = here + 2 * width;
        for (int j = i + 1; j < count && index[j] <= here + along[0]; j++)
            link_pair(x, y, cosine, sine, least_cos, most_off, parent, i, j);
        while (below < count && index[below] < next - along[1])
            below++;
        for (int j = below; j < count && index[j] <= next + along[1]; j++)
            link_pair(x, y, cosine, sine, least_cos, most_off, parent, i, j);
        while (second < count && index[second] < after - along[2])
            second++;
        for (int j = second; j < count && index[j] <= after + along[2]; j++)
            link_pair(x, y, cosine, sine, least_cos, most_off, parent, i, j);
    }
    for (int i = 0; i < count; i++)
        size[root_of(parent, i)]++;
    int n = 0; /* pieces are numbered in the order of their last point */
    for (int i = 0; i < count; i++)
        piece[i] = parent[i] == i && size[i] >= least_points ? n++ : -1;
    double *sum = calloc(7 * (size_t)(n ? n : 1), sizeof(double));
    if (!sum)
        return -1;
    for (int i = 0; i < count; i++) {
        int own = piece[i] = piece[root_of(parent, i)];
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
        double angle = 0.5 * atan2(2.0 * sxy, sxx - syy);
        double off = 0.5 * (sxx + syy) - hypot(0.5 * (sxx - syy), sxy);
        axis[2 * k] = cos(angle);
        axis[2 * k + 1] = sin(angle);
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

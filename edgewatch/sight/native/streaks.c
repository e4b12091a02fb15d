/* Streaks from steps of brightness along straight pieces: see streaks.py. Every number that the method knows comes from
 * there. */
#include "lengths.h"

typedef struct {
    const float *blurred;
    int32_t height, width;
} Picture;

/* Steps, as streaks.py has them, one array a column. */
typedef struct {
    double *at, *inward, *height, *size;
    uint8_t *begins, *full;
} Steps;

typedef struct {
    double least_height, share, full_share;
    int32_t least_points, beyond_px, box_px;
} StepRules;

typedef struct {
    float side_px, side_tan, least_run_px, ratio_log, fade_px;
    double ratio_most, path_share, long_px, cost_full, cost_most, pair_most;
    int32_t dark_most;
} PairRules;

typedef struct {
    double dark_dn, dark_share, long_px, alone_least_px;
    float same_side_px, same_cos, same_overlap;
    int32_t level_samples;
} LineRules;

static float read(const Picture *picture, double x, double y)
{
    return read_level(picture->blurred, picture->height, picture->width, (float)x, (float)y);
}

/* Steps along n pieces, for streams along (ax, ay). Returns their number, which may be more than `most`, or -1 without
 * memory. */
EXPORT int edgewatch_steps(int n, const double *begin, const double *end, const double *axis, const double *length,
                           const int64_t *points, double ax, double ay, const Picture *picture, const StepRules *rules,
                           Steps *steps, int most)
{
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
                steps->at[2 * found] = start[0] + ux * place;
                steps->at[2 * found + 1] = start[1] + uy * place;
                steps->inward[2 * found] = ux * sign;
                steps->inward[2 * found + 1] = uy * sign;
                steps->height[found] = height;
                steps->size[found] = length[i];
                steps->begins[found] = rise[k] > 0.0;
                steps->full[found] = height > rules->full_share * high;
            }
            found++;
        }
    }
    free(total);
    return found;
}

/* Whether the line from a to b is brighter than `level` all the way, but for a few points. */
static int stays_lit(const Picture *picture, const double *a, const double *b, double level, const PairRules *rules)
{
    double gx = b[0] - a[0], gy = b[1] - a[1], length = hypot(gx, gy);
    int size = (int)ceil((length - 4.0) / (length > rules->long_px ? 2.0 : 1.0)), dark = 0;
    size = size < 1 ? 1 : size;
    double inner = fmin(2.0 / length, 0.4), apart = (1.0 - 2.0 * inner) / size;
    for (int k = 0; k < size; k++) {
        double place = inner + ((double)k + 0.5) * apart;
        dark += read(picture, a[0] + place * gx, a[1] + place * gy) < level;
        if (dark > rules->dark_most)
            return 0;
    }
    return 1;
}

typedef struct {
    double cost;
    int32_t begin, end, order;
} Pair;

static int by_cost(const void *a, const void *b)
{
    const Pair *one = a, *other = b;
    return one->cost < other->cost ? -1 : one->cost > other->cost;
}

static int by_order(const void *a, const void *b)
{
    const Pair *one = a, *other = b;
    return one->order < other->order ? -1 : one->order > other->order;
}

/* A step as the search for pairs reads it: place, unit vector along the stream, tangent of the line's error. */
typedef struct {
    float x, y, ux, uy, tangent;
    int32_t step;
} Mark;

static Mark mark_of(const Steps *steps, int k, const PairRules *rules)
{
    float sign = steps->begins[k] ? 1.0f : -1.0f;
    double size = steps->size[k] > 1.0 ? steps->size[k] : 1.0;
    double tangent = 1.0 / size < rules->side_tan ? 1.0 / size : rules->side_tan;
    return (Mark){(float)steps->at[2 * k], (float)steps->at[2 * k + 1], sign * (float)steps->inward[2 * k],
                  sign * (float)steps->inward[2 * k + 1], (float)tangent, k};
}

/* What a pair of steps costs, which are one streak at the nearest; infinity when they are none. */
static double cost_of(const Steps *steps, const Mark *b, const Mark *e, const Lengths *lengths, const PairRules *rules)
{
    float gx = e->x - b->x, gy = e->y - b->y, run = gx * b->ux + gy * b->uy;
    float wide_b = rules->side_px + run * b->tangent, off_b = fabsf(gx * b->uy - gy * b->ux);
    if (!(run > rules->least_run_px && run < (float)lengths->longest_px && off_b < wide_b))
        return INFINITY;
    float side_b = off_b / wide_b, side_e = fabsf(gx * e->uy - gy * e->ux) / (rules->side_px + run * e->tangent);
    if (!(side_e < 1.0f))
        return INFINITY;
    double ratio = fabs(log(steps->height[b->step] / steps->height[e->step]));
    if (!(ratio < rules->ratio_most))
        return INFINITY;
    double unlike = ratio / (rules->ratio_log + run / rules->fade_px);
    double cost = side_b * side_b + side_e * side_e + unlike * unlike;
    if (lengths->number) {
        const double *p = steps->at + 2 * b->step, *q = steps->at + 2 * e->step;
        double off = (logf(run) - expected(lengths, 0.5 * (p[0] + q[0]), 0.5 * (p[1] + q[1]))) / lengths->spread;
        double most = steps->full[b->step] && steps->full[e->step] ? rules->cost_full : rules->cost_most;
        cost += off * off < most ? off * off : most;
    }
    return cost < rules->pair_most ? cost : INFINITY;
}

/* Pairs of n steps that make a streak, each step in one at most, cheapest first; out in the order of their begins and
 * ends, (number, 2), room for n / 2. Returns their number, or -1 without memory. */
EXPORT int edgewatch_pairs(int n, const Steps *steps, const Picture *picture, const Lengths *lengths,
                           const PairRules *rules, int64_t *out)
{
    int room = 4 * n + 16, number = 0, taken = 0, ends = 0;
    Pair *pairs = malloc(sizeof(Pair) * (size_t)room);
    Mark *end = malloc(sizeof(Mark) * ((size_t)n + 1));
    uint8_t *used = calloc((size_t)n + 1, 1);
    if (!pairs || !end || !used)
        goto failed;
    for (int e = 0; e < n; e++)
        if (!steps->begins[e])
            end[ends++] = mark_of(steps, e, rules);
    for (int b = 0; b < n; b++) {
        if (!steps->begins[b])
            continue;
        Mark begin = mark_of(steps, b, rules);
        for (int k = 0; k < ends; k++) {
            double cost = cost_of(steps, &begin, end + k, lengths, rules);
            if (cost == INFINITY)
                continue;
            int e = end[k].step;
            double least = rules->path_share * (steps->height[b] < steps->height[e] ? steps->height[b] : steps->height[e]);
            if (!stays_lit(picture, steps->at + 2 * b, steps->at + 2 * e, least, rules))
                continue;
            if (number == room) {
                Pair *more = realloc(pairs, sizeof(Pair) * 2 * (size_t)room);
                if (!more)
                    goto failed;
                pairs = more;
                room *= 2;
            }
            pairs[number] = (Pair){cost + 1e-9 * number, b, e, number};
            number++;
        }
    }
    qsort(pairs, (size_t)number, sizeof(Pair), by_cost);
    for (int k = 0; k < number; k++) {
        if (used[pairs[k].begin] || used[pairs[k].end])
            continue;
        used[pairs[k].begin] = used[pairs[k].end] = 1;
        pairs[taken++] = pairs[k];
    }
    qsort(pairs, (size_t)taken, sizeof(Pair), by_order);
    for (int k = 0; k < taken; k++) {
        out[2 * k] = pairs[k].begin;
        out[2 * k + 1] = pairs[k].end;
    }
    free(pairs);
    free(end);
    free(used);
    return taken;
failed:
    free(pairs);
    free(end);
    free(used);
    return -1;
}

/* The streak of a step left alone: as long as is typical there, or until it is dark. Returns whether it is one. */
static int complete(const Steps *steps, int k, const Picture *picture, const Lengths *lengths, const LineRules *rules,
                    double *far)
{
    double x = steps->at[2 * k], y = steps->at[2 * k + 1];
    double ux = steps->inward[2 * k], uy = steps->inward[2 * k + 1];
    double size = exp(expected(lengths, x, y));
    size = exp(expected(lengths, x + 0.5 * size * ux, y + 0.5 * size * uy));
    double apart = size > rules->long_px ? 2.0 : 1.0, run = size;
    double level = fmax(rules->dark_dn, rules->dark_share * steps->height[k]);
    int number = (int)ceil(size / apart);
    number = number < 2 ? 2 : number;
    for (int i = 1; i <= number; i++) {
        double place = i * apart;
        if (place > 2.0 && read(picture, x + place * ux, y + place * uy) < level) {
            run = fmin(place, size);
            break;
        }
    }
    far[0] = x + run * ux;
    far[1] = y + run * uy;
    return run >= fmin(rules->alone_least_px, 0.6 * size);
}

/* Of two lines that run within each other the one seen whole stays, or the longer; two seen whole both stay. */
static int within_another(const float *lines, const uint8_t *whole, int n, int i, const LineRules *rules)
{
    const float *own = lines + 7 * (size_t)i; /* begin, unit, length, middle */
    for (int j = 0; j < n; j++) {
        const float *other = lines + 7 * (size_t)j;
        if (!(fabsf((other[5] - own[0]) * own[3] - (other[6] - own[1]) * own[2]) < rules->same_side_px))
            continue;
        float ex = other[0] + other[4] * other[2], ey = other[1] + other[4] * other[3];
        float a = (other[0] - own[0]) * own[2] + (other[1] - own[1]) * own[3];
        float b = (ex - own[0]) * own[2] + (ey - own[1]) * own[3];
        float low = a < b ? a : b, high = a < b ? b : a, least = own[4] < other[4] ? own[4] : other[4];
        float common = (high < own[4] ? high : own[4]) - (low > 0.0f ? low : 0.0f);
        if (!(common > rules->same_overlap * least && fabsf(own[2] * other[2] + own[3] * other[3]) > rules->same_cos))
            continue;
        if (whole[j] || other[4] > own[4] || (other[4] == own[4] && j < i))
            return 1;
    }
    return 0;
}

/* Height along a line, the darker third of samples left out. */
static double level_of(const Picture *picture, const double *begin, const double *end, int samples)
{
    float sorted[64];
    for (int k = 0; k < samples; k++) {
        double share = ((double)k + 0.5) / samples;
        float level = read(picture, begin[0] + share * (end[0] - begin[0]), begin[1] + share * (end[1] - begin[1]));
        int j = k;
        for (; j > 0 && sorted[j - 1] > level; j--)
            sorted[j] = sorted[j - 1];
        sorted[j] = level;
    }
    return sorted[samples / 3];
}

/* Streaks: the pairs, then what the steps left alone make, less those within another. Out: begin, end (number, 2), level,
 * whole; room for n. Returns their number, or -1 without memory. */
EXPORT int edgewatch_lines(int n, const Steps *steps, int pairs, const int64_t *pair, const Picture *picture,
                           const Lengths *lengths, const LineRules *rules, double *begin, double *end, double *level,
                           uint8_t *whole)
{
    float *lines = malloc(sizeof(float) * 7 * ((size_t)n + 1));
    uint8_t *used = calloc((size_t)n + 1, 1);
    if (!lines || !used) {
        free(lines);
        free(used);
        return -1;
    }
    int number = 0, kept = 0;
    for (; number < pairs; number++) {
        const int64_t *own = pair + 2 * number;
        for (int k = 0; k < 2; k++) {
            begin[2 * number + k] = steps->at[2 * own[0] + k];
            end[2 * number + k] = steps->at[2 * own[1] + k];
        }
        used[own[0]] = used[own[1]] = whole[number] = 1;
    }
    for (int k = 0; k < n && lengths->number; k++) {
        double far[2];
        if (used[k] || !complete(steps, k, picture, lengths, rules, far))
            continue;
        double *near_end = steps->begins[k] ? begin : end, *far_end = steps->begins[k] ? end : begin;
        near_end[2 * number] = steps->at[2 * k];
        near_end[2 * number + 1] = steps->at[2 * k + 1];
        far_end[2 * number] = far[0];
        far_end[2 * number + 1] = far[1];
        whole[number++] = 0;
    }
    for (int i = 0; i < number; i++) {
        float bx = (float)begin[2 * i], by = (float)begin[2 * i + 1];
        float ex = (float)end[2 * i], ey = (float)end[2 * i + 1], gx = ex - bx, gy = ey - by;
        float length = fmaxf(hypotf(gx, gy), 1e-6f);
        float line[7] = {bx, by, gx / length, gy / length, length, 0.5f * (bx + ex), 0.5f * (by + ey)};
        memcpy(lines + 7 * (size_t)i, line, sizeof line);
    }
    for (int i = 0; i < number; i++)
        used[i] = whole[i] || !within_another(lines, whole, number, i, rules);
    for (int i = 0; i < number; i++) {
        if (!used[i])
            continue;
        memmove(begin + 2 * kept, begin + 2 * i, 2 * sizeof(double));
        memmove(end + 2 * kept, end + 2 * i, 2 * sizeof(double));
        whole[kept] = whole[i];
        level[kept] = level_of(picture, begin + 2 * kept, end + 2 * kept, rules->level_samples);
        kept++;
    }
    free(lines);
    free(used);
    return kept;
}

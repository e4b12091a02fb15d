/* Pairs of steps that make a streak, and the height of lines: see streaks.py. Every number that the method knows comes
 * from there. */
#include "steps.h"

typedef struct {
    float side_px, side_tan, least_run_px, ratio_log, fade_px;
    double ratio_most, path_share, long_px, cost_full, cost_most, pair_most, full_share;
    int32_t dark_most;
} PairRules;

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
        double most = steps->share[b->step] > rules->full_share && steps->share[e->step] > rules->full_share ? rules->cost_full : rules->cost_most;
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

/* Height along n lines from begin to end (n, 2). */
EXPORT void edgewatch_levels(int n, const double *begin, const double *end, const Picture *picture, int samples,
                             double *level)
{
    for (int i = 0; i < n; i++)
        level[i] = level_of(picture, begin + 2 * i, end + 2 * i, samples);
}

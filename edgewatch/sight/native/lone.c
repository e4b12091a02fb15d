/* Steps left alone, and which of them are a streak's end: see lone.py. */
#include "lone.h"
#include "order.h"

enum { MARKS = 19 };

/* A line from a step: where it ends, how long lines typically are there, and what was read along it; of one that may be
 * listed, its unit vector and length. */
typedef struct {
    double begin[2], end[2], run, size, least, mean, far, unit[2], length;
    int32_t listed;
} Line;

/* What the lines of a picture have in common. `wholes` streaks seen whole, their begins, ends and heights in five columns,
 * and room for those that touch a line; level and sums: room for the points of a line and for the units of the net. */
typedef struct {
    const Picture *picture;
    const Lengths *lengths;
    const LoneRules *rules;
    const LoneNet *net;
    double noise;
    int radial, wholes;
    float alone, seen_whole; /* logarithms of one and their numbers */
    const float *whole[5];
    int32_t *is, *touch;
    float *level, *sums;
} Search;

/* Sine of the angle by which a unit vector is turned from the ray that joins its point with the contact point. */
static double turn_of(const Lengths *lengths, const double *at, const double *unit)
{
    double dx = at[0] - lengths->contact_x, dy = at[1] - lengths->contact_y, away = away_px(lengths, at[0], at[1]);
    double sine = (dx * unit[1] - dy * unit[0]) / (away > 1e-6 ? away : 1e-6);
    return dx * unit[0] + dy * unit[1] < 0.0 ? -sine : sine;
}

/* A unit vector turned towards the ray from the contact point, by the weight of either's error. */
static void turn_to_ray(const double *inward, double sine, double size, const LoneRules *rules, double *turned)
{
    double error = 1.0 / (size > 1.0 ? size : 1.0), turn = 0.0;
    error = error < rules->turn_error_most ? error : rules->turn_error_most;
    double ratio = rules->turn_spread / error;
    if (fabs(sine) < rules->turn_errors * error)
        turn = sine / (1.0 + ratio * ratio);
    double x = inward[0] + turn * inward[1], y = inward[1] - turn * inward[0], length = sqrt(x * x + y * y);
    turned[0] = x / length;
    turned[1] = y / length;
}

/* Reads along a line from a step for line->size: run, least, mean and far. */
static void read_along(const Search *search, const Step *step, const double *inward, Line *line)
{
    const LoneRules *rules = search->rules;
    double dark = rules->dark_share * step->height, size = line->size;
    dark = dark > rules->dark_noise * search->noise ? dark : rules->dark_noise * search->noise;
    double apart = size > rules->long_px ? 2.0 : 1.0, sum = 0.0, far = 0.0;
    int number = whole_above(rules->far_to * size / apart), box = rules->far_box, from = 0, to;
    number = (number > 2 ? number : 2) + 2 * box;
    float *level = search->level, least = INFINITY;
    read_line(search->picture, step->at, inward, apart, apart, number, level);
    while ((from + 1) * apart <= rules->inner_px)
        from++;
    line->run = size;
    for (to = from; to < number && (to + 1) * apart <= size; to++) {
        if (level[to] < dark && line->run == size)
            line->run = (to + 1) * apart;
        least = level[to] < least ? level[to] : least;
        sum += level[to];
    }
    line->least = least;
    line->mean = to > from ? sum / (to - from) : 0.0;
    int first = (int)(rules->far_from * size / apart); /* point beyond that share, and the last before the other */
    int last = whole_above(rules->far_to * size / apart) - 2;
    for (int k = first > box ? first : box; k <= last; k++) {
        double fall = 0.0;
        for (int i = 0; i < box; i++)
            fall += (double)level[k - 1 - i] - level[k + i];
        far = fall > far ? fall : far;
    }
    line->far = far / box;
}

static void set_ends(Line *line, const double *at, const double *inward, int begins)
{
    double far[2] = {at[0] + line->run * inward[0], at[1] + line->run * inward[1]};
    memcpy(begins ? line->begin : line->end, at, sizeof far);
    memcpy(begins ? line->end : line->begin, far, sizeof far);
}

/* Which of the lines seen whole have anything in common with a line of length `own` from (ax, ay) along (ux, uy). Returns
 * their number. */
WIDE static int touching(const Search *search, float ax, float ay, float ux, float uy, float own, int begins)
{
    const LoneRules *rules = search->rules;
    int n = search->wholes, number = 0;
    const float *restrict begin_x = search->whole[0], *restrict begin_y = search->whole[1];
    const float *restrict end_x = search->whole[2], *restrict end_y = search->whole[3];
    int32_t *restrict is = search->is, *restrict touch = search->touch;
    float far = rules->end_far_px, beside_end = rules->end_side_px, beside = 2.0f * rules->same_side_px;
    float end = begins ? 0.0f : own, first = begins ? 1.0f : 0.0f, second = 1.0f - first;
    for (int j = 0; j < n; j++) {
        float bx = begin_x[j] - ax, by = begin_y[j] - ay, ex = end_x[j] - ax, ey = end_y[j] - ay;
        float side_b = bx * uy - by * ux, side_e = ex * uy - ey * ux;
        float along_b = bx * ux + by * uy, along_e = ex * ux + ey * uy;
        float along = first * along_b + second * along_e, side = first * side_b + second * side_e;
        int near = (fabsf(along - end) < far) & (fabsf(side) <= beside_end);
        int low = (along_b < own) | (along_e < own), high = (along_b > 0.0f) | (along_e > 0.0f);
        is[j] = near | (low & high & (fabsf(side_b + side_e) <= beside));
    }
    for (int j = 0; j < n; j++) {
        touch[number] = j;
        number += is[j];
    }
    return number;
}

/* What a line has in common with lines seen whole: see _compare. */
static void compare(const Search *search, const Line *line, int begins, float *mark)
{
    const LoneRules *rules = search->rules;
    float ax = (float)line->begin[0], ay = (float)line->begin[1];
    float ux = (float)line->end[0] - ax, uy = (float)line->end[1] - ay, own = sqrtf(ux * ux + uy * uy);
    float greatest = 0.0f, crowd = 0.0f, cover = 0.0f, nearest = rules->end_far_px;
    own = own > 1e-6f ? own : 1e-6f;
    ux /= own;
    uy /= own;
    int number = touching(search, ax, ay, ux, uy, own, begins);
    for (int i = 0; i < number; i++) {
        int j = search->touch[i];
        float bx = search->whole[0][j] - ax, by = search->whole[1][j] - ay;
        float ex = search->whole[2][j] - ax, ey = search->whole[3][j] - ay;
        float side_b = bx * uy - by * ux, side_e = ex * uy - ey * ux;
        float along_b = bx * ux + by * uy, along_e = ex * ux + ey * uy;
        float low = along_b < along_e ? along_b : along_e, high = along_b < along_e ? along_e : along_b;
        float gap = begins ? fabsf(along_b) : fabsf(along_e - own);
        if ((begins ? fabsf(side_b) : fabsf(side_e)) <= rules->end_side_px)
            nearest = gap < nearest ? gap : nearest;
        float common = (high < own ? high : own) - (low > 0.0f ? low : 0.0f);
        if (!(common > 0.0f) || fabsf(side_b + side_e) > 2.0f * rules->same_side_px ||
            fabsf(side_e - side_b) > rules->skew_most * (high - low))
            continue;
        float share = common / ((high > own ? high : own) - (low < 0.0f ? low : 0.0f));
        greatest = share > greatest ? share : greatest;
        crowd += share;
        cover += common * search->whole[4][j];
    }
    mark[0] = greatest;
    mark[1] = crowd;
    mark[2] = cover / own;
    mark[3] = nearest / rules->end_far_px;
}

/* Heights of the steps beside a step: the greater and the lesser of left and right. */
static void beside(const Search *search, const double *at, const double *inward, double *mark)
{
    const LoneRules *rules = search->rules;
    double rise[2];
    for (int side = 0; side < 2; side++) {
        double off = side ? rules->beside_px : -rules->beside_px, sum = 0.0;
        for (int k = 0; k < rules->beside_count; k++) {
            for (int way = 1; way >= -1; way -= 2) {
                double along = way * rules->beside_along_px[k];
                sum += way * read(search->picture, at[0] + along * inward[0] - off * inward[1],
                                  at[1] + along * inward[1] + off * inward[0]);
            }
        }
        rise[side] = sum / rules->beside_count;
    }
    mark[0] = rise[0] > rise[1] ? rise[0] : rise[1];
    mark[1] = rise[0] > rise[1] ? rise[1] : rise[0];
}

static double clip(double value, double low, double high)
{
    return value < low ? low : value > high ? high : value;
}

/* Logarithm of the odds that a line is a streak. */
static double judge(const Search *search, const float *mark)
{
    const LoneNet *net = search->net;
    float *restrict sums = search->sums;
    double odds = net->output_bias;
    memcpy(sums, net->hidden_bias, sizeof(float) * (size_t)net->units);
    for (int k = 0; k < MARKS; k++) {
        const float *weights = net->hidden + k * net->units, value = mark[k];
        for (int u = 0; u < net->units; u++)
            sums[u] += value * weights[u];
    }
    for (int u = 0; u < net->units; u++)
        odds += (sums[u] > 0.0f ? sums[u] : 0.0f) * net->output[u];
    return odds;
}

/* The line of a step as a streak's, and its odds; minus infinity when it is none for a simpler reason. */
static double follow(const Search *search, const Step *step, double sine, Line *line)
{
    const LoneRules *rules = search->rules;
    const Lengths *lengths = search->lengths;
    const double *at = step->at;
    double inward[2] = {step->inward[0], step->inward[1]}, angle = rules->turn_unknown, height = step->height;
    int begins = step->begins;
    if (search->radial) {
        turn_to_ray(step->inward, sine, step->size, rules, inward);
        angle = sqrt(sine * sine + rules->turn_spread * rules->turn_spread);
    }
    double size = exp(expected(lengths, at[0], at[1]));
    size = exp(expected(lengths, at[0] + 0.5 * size * inward[0], at[1] + 0.5 * size * inward[1]));
    if (search->radial && !begins) { /* nothing glows before it has left the wheel */
        double most = away_px(lengths, at[0], at[1]);
        most = most > rules->least_px ? most : rules->least_px;
        size = size < most ? size : most;
    }
    line->size = size;
    read_along(search, step, inward, line);
    double least = rules->least_share * size < rules->least_px ? rules->least_share * size : rules->least_px;
    if (!(line->run >= least && line->run >= rules->least_lit * size))
        return -INFINITY;
    set_ends(line, at, inward, begins);
    float shared[4], mark[MARKS];
    double sides[2], x = 0.5 * (line->begin[0] + line->end[0]), y = 0.5 * (line->begin[1] + line->end[1]);
    compare(search, line, begins, shared);
    beside(search, at, inward, sides);
    mark[0] = (float)log(height / search->noise);
    mark[1] = (float)step->share;
    mark[2] = (float)log(angle);
    mark[3] = (float)(line->run / size);
    mark[4] = (float)clip(line->least / height, -INFINITY, rules->most);
    mark[5] = (float)clip(line->mean / height, -INFINITY, rules->most);
    mark[6] = (float)clip(away_px(lengths, x, y) / size, 0.0, rules->most);
    mark[7] = shared[0];
    mark[8] = (float)clip(shared[1], 0.0, rules->most);
    mark[9] = (float)clip(shared[2] / height, 0.0, rules->most);
    mark[10] = shared[3];
    mark[11] = (float)clip(line->far / height, 0.0, rules->most);
    mark[12] = (float)clip(sides[0] / height, -1.0, rules->most);
    mark[13] = (float)clip(sides[1] / height, -1.0, rules->most);
    mark[14] = (float)begins;
    mark[15] = (float)log(size);
    mark[16] = (float)clip(step->size / size, 0.0, rules->most);
    mark[17] = search->alone;
    mark[18] = search->seen_whole;
    return judge(search, mark);
}

/* Unit vector and length of a line, for shared_before. */
static void measure(Line *line)
{
    double gx = line->end[0] - line->begin[0], gy = line->end[1] - line->begin[1], length = sqrt(gx * gx + gy * gy);
    line->length = length > 1e-6 ? length : 1e-6;
    line->unit[0] = gx / line->length;
    line->unit[1] = gy / line->length;
}

/* Greatest intersection over union of a line with one before it in the order. */
static double shared_before(const Line *lines, const Key *order, int i, const LoneRules *rules)
{
    const Line *a = lines + order[i].index;
    double ux = a->unit[0], uy = a->unit[1], own = a->length, most = 0.0;
    for (int j = 0; j < i; j++) {
        const Line *b = lines + order[j].index;
        double cosine = ux * b->unit[0] + uy * b->unit[1];
        if (cosine < rules->same_cos)
            continue;
        double bx = b->begin[0] - a->begin[0], by = b->begin[1] - a->begin[1], half = 0.5 * b->length;
        double low = bx * ux + by * uy, high = low + cosine * b->length;
        double side = (bx + half * b->unit[0]) * uy - (by + half * b->unit[1]) * ux;
        if (fabs(side) > rules->same_side_px)
            continue;
        double share = ((high < own ? high : own) - (low > 0.0 ? low : 0.0)) /
                       ((high > own ? high : own) - (low < 0.0 ? low : 0.0));
        most = share > most ? share : most;
    }
    return most;
}

static int put(const Line *line, int number, double *begin, double *end)
{
    memcpy(begin + 2 * number, line->begin, sizeof line->begin);
    memcpy(end + 2 * number, line->end, sizeof line->end);
    return number + 1;
}

/* Streaks of which one end is seen, and lines across the stream that may be arms, from the n steps that are in no pair;
 * `radial`: streaks come from the contact point. Out: begins and ends (number, 2) of the lines, one a step at most. Returns
 * their number, or -1 without memory. */
EXPORT int edgewatch_lone(int n, const Step *steps, int pairs, const int32_t *pair, const Picture *picture, double noise,
                          const Lengths *lengths, int radial, const LoneRules *rules, const LoneNet *net, double *begin,
                          double *end)
{
    size_t points = (size_t)(rules->far_to * lengths->longest_px) + 8 + 2 * (size_t)rules->far_box, room = (size_t)n + 1;
    Line *lines = malloc((sizeof(Line) + 3 * sizeof(Key) + 1) * room);
    float *whole = malloc(sizeof(float) * (5 * (size_t)pairs + points + (size_t)net->units) + 2 * sizeof(int32_t) * room);
    int streaks = 0, arms = 0, number = 0;
    if (!lines || !whole) {
        number = -1;
        goto done;
    }
    float *begin_x = whole, *begin_y = begin_x + pairs, *end_x = begin_y + pairs, *end_y = end_x + pairs;
    float *height = end_y + pairs, *level = height + pairs, *sums = level + points;
    int32_t *is = (int32_t *)(sums + net->units), *touch = is + room;
    const Search search = {picture, lengths, rules, net, noise, radial, pairs, (float)log1p(n - 2 * pairs),
                           (float)log1p(pairs), {begin_x, begin_y, end_x, end_y, height}, is, touch, level, sums};
    Key *odds = (Key *)(lines + room), *runs = odds + room, *spare = runs + room; /* negative, so the greatest come first */
    uint8_t *used = (uint8_t *)(spare + room);
    memset(used, 0, room);
    for (int j = 0; j < pairs; j++) {
        const Step *p = steps + pair[2 * j], *q = steps + pair[2 * j + 1];
        begin_x[j] = (float)p->at[0];
        begin_y[j] = (float)p->at[1];
        end_x[j] = (float)q->at[0];
        end_y[j] = (float)q->at[1];
        height[j] = (float)(p->height < q->height ? p->height : q->height);
        used[pair[2 * j]] = used[pair[2 * j + 1]] = 1;
    }
    for (int k = 0; k < n; k++) {
        const Step *step = steps + k;
        if (used[k])
            continue;
        Line *line = lines + streaks + arms;
        double sine = radial ? turn_of(lengths, step->at, step->inward) : 0.0;
        if (!radial || fabs(sine) < rules->turn_most) {
            double sure = follow(&search, step, sine, line);
            if (!(sure > rules->odds_least))
                continue;
            odds[streaks] = (Key){-sure, streaks + arms};
            streaks++;
        } else {
            line->size = exp(expected(lengths, step->at[0], step->at[1]));
            read_along(&search, step, step->inward, line);
            double least = rules->least_share * line->size;
            if (!(line->run >= (least < rules->least_px ? least : rules->least_px)))
                continue;
            set_ends(line, step->at, step->inward, step->begins);
            runs[arms] = (Key){-line->run, streaks + arms};
            arms++;
        }
        measure(line);
        line->listed = 0;
    }
    sort_keys(odds, streaks, spare);
    for (int i = 0; i < streaks; i++) /* what is shared counts, whether the likelier line is listed or not */
        lines[odds[i].index].listed =
            -odds[i].key - rules->same_weight * shared_before(lines, odds, i, rules) > rules->odds_least;
    sort_keys(runs, arms, spare);
    for (int i = 0; i < streaks + arms; i++)
        if (lines[i].listed)
            number = put(lines + i, number, begin, end);
    for (int i = 0; i < arms; i++)
        if (shared_before(lines, runs, i, rules) < rules->arms_share)
            number = put(lines + runs[i].index, number, begin, end);
done:
    free(lines);
    free(whole);
    return number;
}

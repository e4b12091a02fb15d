/* Steps left alone, and which of them are a streak's end: see lone.py. */
#include "steps.h"

enum { MARKS = 15 };

typedef struct {
    double turn_most, turn_error_most, turn_errors, turn_spread, turn_unknown, dark_dn, dark_share, inner_px, least_px;
    double least_share, least_lit, long_px, far_from, far_to, beside_px, most, odds_least, same_weight, arms_share;
    double noise_dn;
    const double *beside_along_px;
    float same_side_px, same_cos, skew_most, end_side_px, end_far_px;
    int32_t far_box, beside_count, from_contact;
} LoneRules;

typedef struct {
    const float *hidden, *hidden_bias, *output;
    float output_bias;
    int32_t units;
} LoneNet;

/* A line from a step: where it ends, how typical lines there are, and what was read along it. */
typedef struct {
    double begin[2], end[2], run, size, least, mean, far, odds;
    int32_t step, order;
} Line;

static double from_contact_px(const Lengths *lengths, const double *at)
{
    double dx = at[0] - lengths->contact_x, dy = at[1] - lengths->contact_y;
    return sqrt(dx * dx + dy * dy);
}

/* Sine of the angle by which a unit vector is turned from the ray that joins its point with the contact point. */
static double turn_of(const Lengths *lengths, const double *at, const double *unit)
{
    double dx = at[0] - lengths->contact_x, dy = at[1] - lengths->contact_y, away = from_contact_px(lengths, at);
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

/* Reads along a line from `at` for line->size: run, least, mean and far. level: room for the points. */
static void read_along(const Picture *picture, const double *at, const double *inward, double dark,
                       const LoneRules *rules, float *level, Line *line)
{
    double apart = line->size > rules->long_px ? 2.0 : 1.0, sum = 0.0;
    int number = (int)ceil(rules->far_to * line->size / apart), inner = 0, box = rules->far_box;
    number = (number > 2 ? number : 2) + 2 * box;
    line->run = line->size;
    line->least = INFINITY;
    line->far = 0.0;
    int lit = 1;
    for (int k = 0; k < number; k++) {
        double place = (k + 1) * apart;
        level[k] = read(picture, at[0] + place * inward[0], at[1] + place * inward[1]);
        if (!(place > rules->inner_px && place / line->size <= 1.0))
            continue;
        if (lit && level[k] < dark) {
            line->run = place < line->size ? place : line->size;
            lit = 0;
        }
        line->least = level[k] < line->least ? level[k] : line->least;
        sum += level[k];
        inner++;
    }
    line->mean = sum / (inner ? inner : 1);
    for (int k = box; k < number - box; k++) {
        double part = (k + 1) * apart / line->size, fall = 0.0;
        if (!(part > rules->far_from && part < rules->far_to))
            continue;
        for (int i = 0; i < box; i++)
            fall += (double)level[k - 1 - i] - level[k + i];
        line->far = fall > line->far ? fall : line->far;
    }
    line->far /= box;
}

static void set_ends(Line *line, const double *at, const double *inward, int begins)
{
    double far[2] = {at[0] + line->run * inward[0], at[1] + line->run * inward[1]};
    memcpy(begins ? line->begin : line->end, at, sizeof far);
    memcpy(begins ? line->end : line->begin, far, sizeof far);
}

/* What a line has in common with lines seen whole: see _compare. */
static void compare(const Line *line, int begins, int wholes, const float *whole, const LoneRules *rules, float *mark)
{
    float ax = (float)line->begin[0], ay = (float)line->begin[1];
    float ux = (float)line->end[0] - ax, uy = (float)line->end[1] - ay, own = hypotf(ux, uy);
    float greatest = 0.0f, crowd = 0.0f, cover = 0.0f, nearest = rules->end_far_px;
    own = own > 1e-6f ? own : 1e-6f;
    ux /= own;
    uy /= own;
    for (int j = 0; j < wholes; j++) { /* begin, end, height */
        const float *other = whole + 5 * (size_t)j;
        float bx = other[0] - ax, by = other[1] - ay, ex = other[2] - ax, ey = other[3] - ay;
        float side_b = bx * uy - by * ux, side_e = ex * uy - ey * ux;
        float along_b = bx * ux + by * uy, along_e = ex * ux + ey * uy;
        float low = along_b < along_e ? along_b : along_e, high = along_b < along_e ? along_e : along_b;
        float gap = begins ? fabsf(along_b) : fabsf(along_e - own);
        if ((begins ? fabsf(side_b) : fabsf(side_e)) > rules->end_side_px)
            gap = rules->end_far_px;
        nearest = gap < nearest ? gap : nearest;
        float common = (high < own ? high : own) - (low > 0.0f ? low : 0.0f);
        if (!(common > 0.0f) || fabsf(side_b + side_e) > 2.0f * rules->same_side_px ||
            fabsf(side_e - side_b) > rules->skew_most * (high - low))
            continue;
        float share = common / ((high > own ? high : own) - (low < 0.0f ? low : 0.0f));
        greatest = share > greatest ? share : greatest;
        crowd += share;
        cover += common * other[4];
    }
    mark[0] = greatest;
    mark[1] = crowd;
    mark[2] = cover / own;
    mark[3] = nearest / rules->end_far_px;
}

/* Heights of the steps beside a step: the greater and the lesser of left and right. */
static void beside(const Picture *picture, const double *at, const double *inward, const LoneRules *rules, double *mark)
{
    double rise[2];
    for (int side = 0; side < 2; side++) {
        double off = side ? rules->beside_px : -rules->beside_px, sum = 0.0;
        for (int k = 0; k < rules->beside_count; k++) {
            for (int way = 1; way >= -1; way -= 2) {
                double along = way * rules->beside_along_px[k];
                sum += way * read(picture, at[0] + along * inward[0] - off * inward[1],
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
static double judge(const float *mark, const LoneNet *net)
{
    double odds = net->output_bias;
    for (int u = 0; u < net->units; u++) {
        float sum = net->hidden_bias[u];
        for (int k = 0; k < MARKS; k++)
            sum += mark[k] * net->hidden[k * net->units + u];
        odds += (sum > 0.0f ? sum : 0.0f) * net->output[u];
    }
    return odds;
}

/* The line of step k as a streak's, and its odds; 0 when it is none for a simpler reason. */
static int follow(const Steps *steps, int k, int wholes, const float *whole, const Picture *picture,
                  const Lengths *lengths, const LoneRules *rules, const LoneNet *net, float *level, Line *line)
{
    const double *at = steps->at + 2 * k;
    double inward[2] = {steps->inward[2 * k], steps->inward[2 * k + 1]}, angle = rules->turn_unknown;
    double height = steps->height[k], dark = rules->dark_share * height;
    int begins = steps->begins[k];
    if (rules->from_contact) {
        double sine = turn_of(lengths, at, inward);
        if (!(fabs(sine) < rules->turn_most))
            return 0;
        turn_to_ray(steps->inward + 2 * k, sine, steps->size[k], rules, inward);
        angle = sqrt(sine * sine + rules->turn_spread * rules->turn_spread);
    }
    double size = exp(expected(lengths, at[0], at[1]));
    size = exp(expected(lengths, at[0] + 0.5 * size * inward[0], at[1] + 0.5 * size * inward[1]));
    if (rules->from_contact && !begins) { /* nothing glows before it has left the wheel */
        double most = from_contact_px(lengths, at);
        most = most > rules->least_px ? most : rules->least_px;
        size = size < most ? size : most;
    }
    line->size = size;
    read_along(picture, at, inward, dark > rules->dark_dn ? dark : rules->dark_dn, rules, level, line);
    double least = rules->least_share * size < rules->least_px ? rules->least_share * size : rules->least_px;
    if (!(line->run >= least && line->run >= rules->least_lit * size))
        return 0;
    set_ends(line, at, inward, begins);
    float shared[4], mark[MARKS];
    double sides[2], middle[2];
    for (int i = 0; i < 2; i++)
        middle[i] = 0.5 * (line->begin[i] + line->end[i]);
    compare(line, begins, wholes, whole, rules, shared);
    beside(picture, at, inward, rules, sides);
    mark[0] = (float)log(height / rules->noise_dn);
    mark[1] = (float)steps->share[k];
    mark[2] = (float)log(angle);
    mark[3] = (float)(line->run / size);
    mark[4] = (float)clip(line->least / height, -INFINITY, rules->most);
    mark[5] = (float)clip(line->mean / height, -INFINITY, rules->most);
    mark[6] = (float)clip(from_contact_px(lengths, middle) / size, 0.0, rules->most);
    mark[7] = shared[0];
    mark[8] = (float)clip(shared[1], 0.0, rules->most);
    mark[9] = (float)clip(shared[2] / height, 0.0, rules->most);
    mark[10] = shared[3];
    mark[11] = (float)clip(line->far / height, 0.0, rules->most);
    mark[12] = (float)clip(sides[0] / height, -1.0, rules->most);
    mark[13] = (float)clip(sides[1] / height, -1.0, rules->most);
    mark[14] = (float)begins;
    line->odds = judge(mark, net);
    return line->odds > rules->odds_least;
}

/* Greatest intersection over union of a line with one before it in the list. */
static double shared_before(const Line *lines, int i, const LoneRules *rules)
{
    const Line *a = lines + i;
    double gx = a->end[0] - a->begin[0], gy = a->end[1] - a->begin[1], own = sqrt(gx * gx + gy * gy), most = 0.0;
    own = own > 1e-6 ? own : 1e-6;
    gx /= own;
    gy /= own;
    for (int j = 0; j < i; j++) {
        const Line *b = lines + j;
        double ox = b->end[0] - b->begin[0], oy = b->end[1] - b->begin[1], length = sqrt(ox * ox + oy * oy);
        double bx = b->begin[0] - a->begin[0], by = b->begin[1] - a->begin[1];
        double low = bx * gx + by * gy, cosine = (gx * ox + gy * oy) / (length > 1e-6 ? length : 1e-6);
        double high = low + cosine * length, side = (bx + 0.5 * ox) * gy - (by + 0.5 * oy) * gx;
        if (fabs(side) > rules->same_side_px || cosine < rules->same_cos)
            continue;
        double share = ((high < own ? high : own) - (low > 0.0 ? low : 0.0)) /
                       ((high > own ? high : own) - (low < 0.0 ? low : 0.0));
        most = share > most ? share : most;
    }
    return most;
}

static int by_odds(const void *a, const void *b)
{
    const Line *one = a, *other = b;
    return one->odds > other->odds ? -1 : one->odds < other->odds ? 1 : one->order - other->order;
}

static int by_place(const void *a, const void *b) { return ((const Line *)a)->order - ((const Line *)b)->order; }

/* Streaks of which one end is seen, and lines across the stream that may be arms, from the steps that are in no pair. Out:
 * ends (2, n, 2), begins and ends of the lines. Returns their number, or -1 without memory. */
EXPORT int edgewatch_lone(int n, const Steps *steps, int pairs, const int64_t *pair, const Picture *picture,
                          const Lengths *lengths, const LoneRules *rules, const LoneNet *net, double *ends)
{
    size_t points = (size_t)(rules->far_to * lengths->longest_px) + 8 + 2 * (size_t)rules->far_box;
    Line *lines = malloc(sizeof(Line) * 2 * ((size_t)n + 1));
    float *whole = malloc(sizeof(float) * (5 * (size_t)(pairs + 1) + points));
    uint8_t *used = calloc((size_t)n + 1, 1);
    int number = 0, arms = 0, listed = 0;
    if (!lines || !whole || !used) {
        number = -1;
        goto done;
    }
    Line *arm = lines + n + 1;
    float *level = whole + 5 * (size_t)(pairs + 1);
    for (int j = 0; j < pairs; j++) {
        const int64_t *own = pair + 2 * j;
        double low = steps->height[own[0]] < steps->height[own[1]] ? steps->height[own[0]] : steps->height[own[1]];
        for (int i = 0; i < 4; i++)
            whole[5 * j + i] = (float)steps->at[2 * own[i / 2] + i % 2];
        whole[5 * j + 4] = (float)low;
        used[own[0]] = used[own[1]] = 1;
    }
    for (int k = 0; k < n; k++) {
        if (used[k])
            continue;
        lines[number].order = k;
        number += follow(steps, k, pairs, whole, picture, lengths, rules, net, level, lines + number);
        const double *at = steps->at + 2 * k, *inward = steps->inward + 2 * k;
        if (!rules->from_contact || fabs(turn_of(lengths, at, inward)) < rules->turn_most)
            continue;
        Line *line = arm + arms;
        double dark = rules->dark_share * steps->height[k];
        line->size = exp(expected(lengths, at[0], at[1]));
        read_along(picture, at, inward, dark > rules->dark_dn ? dark : rules->dark_dn, rules, level, line);
        double least = rules->least_share * line->size;
        if (!(line->run >= (least < rules->least_px ? least : rules->least_px)))
            continue;
        set_ends(line, at, inward, steps->begins[k]);
        line->odds = line->run; /* the longest first */
        line->order = k;
        arms++;
    }
    qsort(lines, (size_t)number, sizeof(Line), by_odds);
    for (int i = 0; i < number; i++) /* the list is looked through as it was: shares count, whether listed or not */
        lines[i].size = lines[i].odds - rules->same_weight * shared_before(lines, i, rules);
    for (int i = 0; i < number; i++)
        if (lines[i].size > rules->odds_least)
            lines[listed++] = lines[i];
    qsort(lines, (size_t)listed, sizeof(Line), by_place);
    qsort(arm, (size_t)arms, sizeof(Line), by_odds);
    number = 0;
    for (int i = 0; i < listed + arms; i++) {
        const Line *line = i < listed ? lines + i : arm + (i - listed);
        if (i >= listed && !(shared_before(arm, i - listed, rules) < rules->arms_share))
            continue;
        memcpy(ends + 2 * number, line->begin, sizeof line->begin);
        memcpy(ends + 2 * ((size_t)n + number), line->end, sizeof line->end);
        number++;
    }
done:
    free(lines);
    free(whole);
    free(used);
    return number;
}

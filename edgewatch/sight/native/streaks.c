/* Streaks of a picture: steps, their pairs, the lengths learnt from them, steps left alone, and the height of lines: see
 * streaks.py. Every number that the method knows comes from there. */
#include "lone.h"
#include "order.h"

typedef struct {
    float side_px, side_tan, least_run_px, ratio_log, fade_px;
    double ratio_most, path_share, long_px, cost_full, cost_most, pair_most, full_share;
    int32_t dark_most;
} PairRules;

typedef struct {
    StepRules steps;
    PairRules pairs;
    LengthRules lengths;
    LoneRules lone;
    LoneNet net;
    double learn_noise;
    int32_t level_samples;
} StreakRules;

enum { AT_ONCE = 32 };

/* Whether the line between two steps is bright for the lower one all the way, but for a few points. */
static int stays_lit(const Picture *picture, const Step *begin, const Step *stop, const PairRules *rules)
{
    const double *a = begin->at, *b = stop->at;
    double level = rules->path_share * (begin->height < stop->height ? begin->height : stop->height);
    double way[2] = {b[0] - a[0], b[1] - a[1]}, length = sqrt(way[0] * way[0] + way[1] * way[1]);
    float levels[AT_ONCE];
    double wanted = (length - 4.0) / (length > rules->long_px ? 2.0 : 1.0);
    int size = wanted > 1.0 ? whole_above(wanted) : 1, dark = 0;
    double inner = 2.0 / length < 0.4 ? 2.0 / length : 0.4, apart = (1.0 - 2.0 * inner) / size;
    for (int k = 0; k < size && dark <= rules->dark_most; k += AT_ONCE) {
        int number = size - k < AT_ONCE ? size - k : AT_ONCE;
        read_line(picture, a, way, inner + ((double)k + 0.5) * apart, apart, number, levels);
        for (int i = 0; i < number; i++)
            dark += levels[i] < level;
    }
    return dark <= rules->dark_most;
}

/* A step as the search for pairs reads it: place, unit vector along the stream, tangent of the line's error. */
typedef struct {
    float x, y, ux, uy, tangent;
    int32_t step;
    double log_height;
} Mark;

static Mark mark_of(const Step *steps, int k, const PairRules *rules)
{
    const Step *step = steps + k;
    float sign = step->begins ? 1.0f : -1.0f;
    double tangent = 1.0 / (step->size > 1.0 ? step->size : 1.0);
    tangent = tangent < rules->side_tan ? tangent : rules->side_tan;
    return (Mark){(float)step->at[0], (float)step->at[1], sign * (float)step->inward[0], sign * (float)step->inward[1],
                  (float)tangent, k, log(step->height)};
}

/* Of n ends at x, y: those that lie ahead of a begin and beside its line, no farther than may be. Returns their number. */
WIDE static int ahead_of(const Mark *begin, int n, const float *restrict x, const float *restrict y, float longest_px,
                         const PairRules *rules, int32_t *restrict is, int32_t *restrict near)
{
    float bx = begin->x, by = begin->y, ux = begin->ux, uy = begin->uy, tangent = begin->tangent;
    float least = rules->least_run_px, side = rules->side_px;
    for (int k = 0; k < n; k++) {
        float gx = x[k] - bx, gy = y[k] - by, run = gx * ux + gy * uy, off = fabsf(gx * uy - gy * ux);
        is[k] = (run > least) & (run < longest_px) & (off < side + run * tangent);
    }
    int number = 0;
    for (int k = 0; k < n; k++) {
        near[number] = k;
        number += is[k];
    }
    return number;
}

/* What a pair of steps costs, of which the end is ahead of the begin: one streak at the cheapest; infinity when none. */
static double cost_of(const Step *steps, const Mark *b, const Mark *e, const Lengths *lengths, const PairRules *rules)
{
    float gx = e->x - b->x, gy = e->y - b->y, run = gx * b->ux + gy * b->uy;
    float side_b = fabsf(gx * b->uy - gy * b->ux) / (rules->side_px + run * b->tangent);
    float side_e = fabsf(gx * e->uy - gy * e->ux) / (rules->side_px + run * e->tangent);
    double ratio = fabs(b->log_height - e->log_height);
    if (!(side_e < 1.0f && ratio < rules->ratio_most))
        return INFINITY;
    double unlike = ratio / (rules->ratio_log + run / rules->fade_px);
    double cost = side_b * side_b + side_e * side_e + unlike * unlike;
    if (lengths->number && cost < rules->pair_most) {
        const Step *p = steps + b->step, *q = steps + e->step;
        double typical = expected(lengths, 0.5 * (p->at[0] + q->at[0]), 0.5 * (p->at[1] + q->at[1]));
        double off = (logf(run) - typical) / lengths->spread;
        double most = p->share > rules->full_share && q->share > rules->full_share ? rules->cost_full : rules->cost_most;
        cost += off * off < most ? off * off : most;
    }
    return cost < rules->pair_most ? cost : INFINITY;
}

/* Pairs of steps that may be streaks, with their costs; a list that grows. */
typedef struct {
    int32_t (*pair)[2];
    Key *cost; /* and as much room again */
    int number, room;
} Candidates;

static int add(Candidates *found, int begin, int end, double cost)
{
    if (found->number == found->room) {
        int room = found->room * 2;
        void *pair = realloc(found->pair, sizeof *found->pair * (size_t)room);
        found->pair = pair ? pair : found->pair;
        void *costs = realloc(found->cost, 2 * sizeof(Key) * (size_t)room);
        found->cost = costs ? costs : found->cost;
        if (!pair || !costs)
            return 0;
        found->room = room;
    }
    found->pair[found->number][0] = begin;
    found->pair[found->number][1] = end;
    found->cost[found->number] = (Key){cost + 1e-9 * found->number, found->number}; /* rounding decides no ties */
    found->number++;
    return 1;
}

/* Pairs of n steps that make a streak, each step in one at most, cheapest first; out in the order of their begins and
 * ends, (number, 2), room for n / 2. Returns their number, or -1 without memory. */
EXPORT int edgewatch_pairs(int n, const Step *steps, const Picture *picture, const Lengths *lengths, const PairRules *rules,
                           int32_t *out)
{
    int ends = 0, taken = 0, room = 4 * n + 16;
    Candidates found = {malloc(sizeof(int32_t[2]) * (size_t)room), malloc(2 * sizeof(Key) * (size_t)room), 0, room};
    Mark *end = malloc((sizeof(Mark) + 2 * sizeof(float) + 2 * sizeof(int32_t) + 2) * ((size_t)n + 1));
    if (!found.pair || !found.cost || !end) {
        taken = -1;
        goto done;
    }
    float *x = (float *)(end + n + 1), *y = x + n + 1, longest_px = (float)lengths->longest_px;
    int32_t *is = (int32_t *)(y + n + 1), *near = is + n + 1;
    uint8_t *used = (uint8_t *)(near + n + 1);
    memset(used, 0, (size_t)n + 1);
    for (int e = 0; e < n; e++) {
        if (steps[e].begins)
            continue;
        end[ends] = mark_of(steps, e, rules);
        x[ends] = end[ends].x;
        y[ends] = end[ends].y;
        ends++;
    }
    for (int b = 0; b < n; b++) {
        if (!steps[b].begins)
            continue;
        Mark begin = mark_of(steps, b, rules);
        int number = ahead_of(&begin, ends, x, y, longest_px, rules, is, near);
        for (int i = 0; i < number; i++) {
            const Mark *other = end + near[i];
            double cost = cost_of(steps, &begin, other, lengths, rules);
            if (cost == INFINITY)
                continue;
            if (!add(&found, b, other->step, cost)) {
                taken = -1;
                goto done;
            }
        }
    }
    sort_keys(found.cost, found.number, found.cost + found.room);
    for (int k = 0; k < found.number; k++) { /* whether a pair is lit is asked last: it costs most */
        int32_t *pair = found.pair[found.cost[k].index];
        if (used[pair[0]] || used[pair[1]] || !stays_lit(picture, steps + pair[0], steps + pair[1], rules))
            pair[0] = -1;
        else
            used[pair[0]] = used[pair[1]] = 1;
    }
    for (int k = 0; k < found.number; k++)
        if (found.pair[k][0] >= 0)
            memcpy(out + 2 * taken++, found.pair[k], sizeof found.pair[k]);
done:
    free(found.pair);
    free(found.cost);
    free(end);
    return taken;
}

enum { SAMPLES_MOST = 64 };

/* Height along a line, the darker third of samples left out. */
static double level_of(const Picture *picture, const double *begin, const double *end, int samples)
{
    float level[SAMPLES_MOST], darkest[SAMPLES_MOST / 3 + 1];
    double way[2] = {end[0] - begin[0], end[1] - begin[1]};
    int number = 0, most = samples / 3 + 1;
    read_line(picture, begin, way, 0.5 / samples, 1.0 / samples, samples, level);
    for (int k = 0; k < samples; k++) { /* the darkest so far, in order */
        if (number == most && !(level[k] < darkest[most - 1]))
            continue;
        int j = number < most ? number++ : most - 1;
        for (; j > 0 && darkest[j - 1] > level[k]; j--)
            darkest[j] = darkest[j - 1];
        darkest[j] = level[k];
    }
    return darkest[most - 1];
}

/* Learn lengths from pairs of steps well above noise that lead from darkness. begin, end: room for them. */
static int learn_pairs(const Step *steps, int pairs, const int32_t *pair, double noise, LengthMemory *memory,
                       const StreakRules *rules, double *begin, double *end)
{
    int number = 0;
    for (int j = 0; j < pairs; j++) {
        const Step *p = steps + pair[2 * j], *q = steps + pair[2 * j + 1];
        double share = p->share < q->share ? p->share : q->share, height = p->height < q->height ? p->height : q->height;
        if (!(share > rules->pairs.full_share && height > rules->learn_noise * noise))
            continue;
        memcpy(begin + 2 * number, p->at, sizeof p->at);
        memcpy(end + 2 * number++, q->at, sizeof q->at);
    }
    return edgewatch_learn(number, begin, end, memory, &rules->lengths);
}

/* Streaks from the pieces of a picture, for streams along (ax, ay); memory learns from them. Out: begin and end (most, 2),
 * level, and whole, whether both ends were seen. Returns their number; when there are more steps than `most`, the number of
 * steps, and then nothing was done; or -1 without memory. */
EXPORT int edgewatch_streaks(int pieces, const double *from, const double *to, const double *axis, const double *length,
                             const int64_t *points, const float *blurred, int height, int width, double noise, double ax,
                             double ay, LengthMemory *memory, const StreakRules *rules, int most, double *begin, double *end,
                             double *level, uint8_t *whole)
{
    const Picture picture = {blurred, height, width};
    const Pieces all = {from, to, axis, length, points, pieces};
    const Lengths *lengths = &memory->lengths;
    Step *steps = malloc(sizeof(Step) * (size_t)most + sizeof(int32_t) * ((size_t)most + 1));
    if (!steps)
        return -1;
    int32_t *pair = (int32_t *)(steps + most);
    int first = !lengths->number, lone = 0, pairs;
    int n = edgewatch_steps(&all, ax, ay, &picture, noise, &rules->steps, steps, most);
    if (n < 0 || n > most) {
        free(steps);
        return n;
    }
    pairs = edgewatch_pairs(n, steps, &picture, lengths, &rules->pairs, pair);
    if (pairs >= 0 && learn_pairs(steps, pairs, pair, noise, memory, rules, begin, end) < 0)
        pairs = -1;
    if (pairs >= 0 && first && lengths->number) /* what was just learnt helps the first picture too */
        pairs = edgewatch_pairs(n, steps, &picture, lengths, &rules->pairs, pair);
    for (int j = 0; j < pairs; j++) {
        memcpy(begin + 2 * j, steps[pair[2 * j]].at, 2 * sizeof(double));
        memcpy(end + 2 * j, steps[pair[2 * j + 1]].at, 2 * sizeof(double));
    }
    if (pairs >= 0 && lengths->number && n > 2 * pairs)
        lone = edgewatch_lone(n, steps, pairs, pair, &picture, noise, lengths, from_contact(memory, &rules->lengths),
                              &rules->lone, &rules->net, begin + 2 * pairs, end + 2 * pairs);
    free(steps);
    if (pairs < 0 || lone < 0)
        return -1;
    for (int i = 0; i < pairs + lone; i++) {
        level[i] = level_of(&picture, begin + 2 * i, end + 2 * i, rules->level_samples);
        whole[i] = i < pairs;
    }
    return pairs + lone;
}

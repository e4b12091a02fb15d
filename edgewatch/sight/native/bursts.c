/* Which candidates are bursts: see bursts.py and burst_net.py. The net's matrix products are taken by others; here is what
 * lies between them. */
#include "candidates.h"
#include "kernels.h"
#include "rings.h"

typedef struct {
    Places now, before, sift;
    const float *sift_weights, *sift_bias, *sifted_weights; /* (sift.number, units), units, units */
    const int32_t *shared; /* rings_before: which ring of this picture each of the one before is */
    double contact_px, crowd_px, apart_px; /* of candidates nearer to each other than the last the likeliest is looked at */
    float sifted_bias, sift_least; /* log odds from which a candidate is looked at again */
    float level_noise;
    int32_t sift_units, directions, rings, rings_before, reach, step, context;
} LookRules;

typedef struct {
    const float *first_bias, *second_bias, *hidden_bias, *output, *output_bias, *share, *share_bias;
    int32_t first_units, second_units, hidden_units, outputs, context, places, reach, step;
} Net;

typedef struct {
    double shift, least_sure, farthest_px, unmoved_least, unmoved_most, merge_px, ends_px;
    int32_t least_ends;
} ChoiceRules;

typedef struct {
    double found, expected; /* sums over the candidates */
} Told;

/* Which of m bursts stay: within radius of each lie at least `least_ends` ends of the n pieces, and none nearer than
 * merge_px is likelier, or as likely and before it. */
EXPORT void edgewatch_merge(int m, const double *at, const double *sure, int n, const double *begin, const double *end,
                            double radius, int least_ends, double merge_px, uint8_t *keep)
{
    for (int i = 0; i < m; i++) {
        double x = at[2 * i], y = at[2 * i + 1];
        int better = 0;
        for (int j = 0; j < m && !better; j++) {
            double dx = at[2 * j] - x, dy = at[2 * j + 1] - y;
            better = dx * dx + dy * dy < merge_px * merge_px && (sure[j] > sure[i] || (sure[j] == sure[i] && j < i));
        }
        keep[i] = !better && count_ends(x, y, n, begin, end, radius) >= least_ends;
    }
}

/* Each of `directions` values of `channels` with its neighbours up to `reach` away, for every `step`-th of them: out
 * (n * directions / step, (2 reach + 1) channels). The values go round a ring: in (n, directions, channels). */
EXPORT void edgewatch_windows(int n, const float *in, int directions, int channels, int reach, int step, float *out)
{
    size_t ring = (size_t)directions * channels, window = (size_t)(2 * reach + 1) * channels;
    for (int i = 0; i < n; i++, in += ring) {
        for (int d = 0; d < directions; d += step, out += window) {
            int before = d < reach ? reach - d : 0; /* places that lie at the ring's other end */
            int after = d + reach >= directions ? d + reach + 1 - directions : 0;
            size_t from = (size_t)(d - reach + before) * channels, number = window - (size_t)(before + after) * channels;
            memcpy(out, in + ring - (size_t)before * channels, sizeof(float) * (size_t)before * channels);
            memcpy(out + (size_t)before * channels, in + from, sizeof(float) * number);
            memcpy(out + window - (size_t)after * channels, in, sizeof(float) * (size_t)after * channels);
        }
    }
}

/* Rings of one picture and of the one before, (n, first, directions) and (n, second, directions), as (n, directions, first
 * + second). */
EXPORT void edgewatch_channels(int n, const float *rings, int first, const float *before, int second, int directions,
                               float *out)
{
    int channels = first + second;
    for (int i = 0; i < n; i++, out += (size_t)directions * channels) {
        for (int c = 0; c < channels; c++) {
            const float *in = c < first ? rings + ((size_t)i * first + c) * directions
                                        : before + ((size_t)i * second + c - first) * directions;
            for (int d = 0; d < directions; d++)
                out[d * channels + c] = in[d];
        }
    }
}

enum { UNITS = 24 }; /* as many sums fit into registers */

/* Log odds of the small perceptron that sees `seen`; its units are taken UNITS at a time. */
WIDE static float sift(const LookRules *rules, const float *seen)
{
    int units = rules->sift_units;
    float odds = rules->sifted_bias;
    for (int from = 0; from < units; from += UNITS) {
        float sum[UNITS];
        memcpy(sum, rules->sift_bias + from, sizeof sum);
        for (int k = 0; k < rules->sift.number; k++) {
            const float *weight = rules->sift_weights + (size_t)k * units + from;
            for (int u = 0; u < UNITS; u++)
                sum[u] += seen[k] * weight[u];
        }
        for (int u = 0; u < UNITS; u++)
            odds += (sum[u] > 0.0f ? sum[u] : 0.0f) * rules->sifted_weights[from + u];
    }
    return odds;
}

/* Whether one of n points is nearer to point i than apart_px and likelier, or as likely and before it. */
static int better_near(int i, int n, const double *at, const float *odds, double apart_px)
{
    for (int k = 0; k < n; k++) {
        double dx = at[2 * k] - at[2 * i], dy = at[2 * k + 1] - at[2 * i + 1];
        if (dx * dx + dy * dy < apart_px * apart_px && (odds[k] > odds[i] || (odds[k] == odds[i] && k < i)))
            return 1;
    }
    return 0;
}

enum { LANES = 8 }; /* sums at a time */

/* Cosine between what is seen on the rings of both pictures. */
WIDE static double likeness(const LookRules *rules, const float *now, const float *before)
{
    float both[LANES] = {0.0f}, first[LANES] = {0.0f}, second[LANES] = {0.0f}, sum[3] = {0.0f};
    int directions = rules->directions;
    for (int r = 0; r < rules->rings_before; r++) {
        const float *a = now + (size_t)rules->shared[r] * directions, *b = before + (size_t)r * directions;
        int d = 0;
        for (; d + LANES <= directions; d += LANES) {
            for (int k = 0; k < LANES; k++) {
                both[k] += a[d + k] * b[d + k];
                first[k] += a[d + k] * a[d + k];
                second[k] += b[d + k] * b[d + k];
            }
        }
        for (; d < directions; d++) {
            sum[0] += a[d] * b[d];
            sum[1] += a[d] * a[d];
            sum[2] += b[d] * b[d];
        }
    }
    for (int k = 0; k < LANES; k++) {
        sum[0] += both[k];
        sum[1] += first[k];
        sum[2] += second[k];
    }
    double norm = sqrt((double)sum[1] * sum[2]);
    return sum[0] / (norm > 1e-6 ? norm : 1e-6);
}

/* Candidates of a picture that pass the sieve, and what the net is to see of each. before: the picture before, blurred,
 * NULL without one. camera: context that is the same for all candidates; the crowd goes to place 4. Room for `most` in
 * at (x, y), context, alike, windows (most, directions / step, (2 reach + 1) (rings + rings_before)). Returns their number; or,
 * above `most`, the room that was needed; or -1 without memory. */
EXPORT int edgewatch_look(const Traced *traced, const float *before, double noise_before,
                          const CandidateRules *candidates, const LookRules *rules, const float *camera, double *at,
                          float *context, double *alike, float *windows, int most)
{
    enum { CROWD = 4 };
    int found = edgewatch_candidates(traced, candidates, at, most);
    if (found < 0 || found > most)
        return found;
    int directions = rules->directions, channels = rules->rings + rules->rings_before;
    size_t window = (size_t)(2 * rules->reach + 1) * channels * (directions / rules->step), ring = (size_t)channels * directions;
    float *work = malloc(sizeof(float) * (2 * ring + rules->sift.number) +
                         (sizeof(float) + 1) * ((size_t)found + 1));
    if (!work)
        return -1;
    float *now = work, *earlier = now + rules->now.number, *mixed = now + ring;
    float *seen = mixed + ring, *odds = seen + rules->sift.number;
    uint8_t *dropped = (uint8_t *)(odds + found + 1);
    Blurred own = {traced->blurred, traced->height, traced->width}, past = {before, traced->height, traced->width};
    float scale = (float)(1.0 / (rules->level_noise * traced->noise));
    float scale_before = before ? (float)(1.0 / (rules->level_noise * noise_before)) : 0.0f;
    int likely = 0, passed = 0;
    for (int i = 0; i < found; i++) {
        double dx = at[2 * i] - traced->contact_x, dy = at[2 * i + 1] - traced->contact_y, far = sqrt(dx * dx + dy * dy);
        if (far <= rules->contact_px)
            continue;
        read_rings(&own, (float)at[2 * i], (float)at[2 * i + 1], (float)(dx / far), (float)(dy / far), &rules->sift, scale,
                   seen);
        odds[likely] = sift(rules, seen);
        at[2 * likely] = at[2 * i];
        at[2 * likely + 1] = at[2 * i + 1];
        likely += odds[likely] >= rules->sift_least;
    }
    for (int i = 0; i < likely; i++)
        dropped[i] = better_near(i, likely, at, odds, rules->apart_px);
    for (int i = 0; i < likely; i++) {
        if (dropped[i])
            continue;
        double dx = at[2 * i] - traced->contact_x, dy = at[2 * i + 1] - traced->contact_y, far = sqrt(dx * dx + dy * dy);
        float x = (float)at[2 * i], y = (float)at[2 * i + 1], c = (float)(dx / far), s = (float)(dy / far);
        read_rings(&own, x, y, c, s, &rules->now, scale, now);
        if (before)
            read_rings(&past, x, y, c, s, &rules->before, scale_before, earlier);
        else
            memset(earlier, 0, sizeof(float) * (size_t)rules->before.number);
        edgewatch_channels(1, now, rules->rings, earlier, rules->rings_before, directions, mixed);
        edgewatch_windows(1, mixed, directions, channels, rules->reach, rules->step, windows + passed * window);
        alike[passed] = likeness(rules, now, earlier);
        float *told = context + (size_t)passed * rules->context;
        memcpy(told, camera, sizeof(float) * (size_t)rules->context);
        told[CROWD] += log1pf((float)count_ends(at[2 * i], at[2 * i + 1], traced->pieces, traced->begin, traced->end,
                                                rules->crowd_px));
        at[2 * passed] = at[2 * i];
        at[2 * passed + 1] = at[2 * i + 1];
        passed++;
    }
    free(work);
    return passed;
}

WIDE static void rectify(float *values, const float *bias, int rows, int units)
{
    for (int i = 0; i < rows; i++, values += units)
        for (int u = 0; u < units; u++)
            values[u] = values[u] + bias[u] > 0.0f ? values[u] + bias[u] : 0.0f;
}

/* The second layer's windows of n candidates from the first layer's products (n, directions, first_units). */
EXPORT void edgewatch_second(int n, const Net *net, float *first, float *windows)
{
    int directions = net->places * net->step;
    rectify(first, net->first_bias, n * directions, net->first_units);
    edgewatch_windows(n, first, directions, net->first_units, net->reach, net->step, windows);
}

/* What the hidden layer sees: the second layer's products (n, places, second_units), then the context. */
EXPORT void edgewatch_joint(int n, const Net *net, float *second, const float *context, float *joint)
{
    size_t flat = (size_t)net->places * net->second_units, own = (size_t)net->context;
    rectify(second, net->second_bias, n * net->places, net->second_units);
    for (int i = 0; i < n; i++) {
        float *row = joint + i * (flat + own);
        memcpy(row, second + i * flat, sizeof(float) * flat);
        memcpy(row + flat, context + i * own, sizeof(float) * own);
    }
}

static double probability(double odds)
{
    return 1.0 / (1.0 + exp(odds < -30.0 ? 30.0 : odds > 30.0 ? -30.0 : -odds));
}

static double clip(double value, double most) { return value < -most ? -most : value > most ? most : value; }

/* Which of n candidates are bursts, from the hidden layer's products (n, hidden_units). told: sums of the probabilities of
 * all, and of what was to be expected of them before a look. Of those that are: found_at (n, 2) px, and found (3, n):
 * `sure`, `late`, `fresh`. Returns their number, or -1 without memory. */
EXPORT int edgewatch_choose(int n, const Net *net, const ChoiceRules *rules, const Traced *traced, const double *at,
                            const float *context, const double *alike, float *hidden, Told *told, double *found_at,
                            double *found)
{
    uint8_t *keep = malloc((size_t)n + 1);
    if (!keep)
        return -1;
    rectify(hidden, net->hidden_bias, n, net->hidden_units);
    double *own = found, *late = found + n, *fresh = late + n;
    int likely = 0, kept = 0;
    *told = (Told){0.0, 0.0};
    for (int i = 0; i < n; i++) {
        const float *unit = hidden + (size_t)i * net->hidden_units, *own_context = context + (size_t)i * net->context;
        float out[8];
        for (int k = 0; k < net->outputs; k++)
            out[k] = net->output_bias[k];
        for (int u = 0; u < net->hidden_units; u++)
            for (int k = 0; k < net->outputs; k++)
                out[k] += unit[u] * net->output[u * net->outputs + k];
        float odds = net->share_bias[0];
        for (int k = 0; k < net->context; k++)
            odds += own_context[k] * net->share[k];
        double sure = probability(out[0] + rules->shift);
        told->expected += probability(odds);
        told->found += sure;
        if (sure < rules->least_sure)
            continue;
        double dx = at[2 * i] - traced->contact_x, dy = at[2 * i + 1] - traced->contact_y, far = sqrt(dx * dx + dy * dy);
        double ahead = clip(out[1], rules->farthest_px) / far, aside = clip(out[2], rules->farthest_px) / far;
        found_at[2 * likely] = at[2 * i] + ahead * dx - aside * dy;
        found_at[2 * likely + 1] = at[2 * i + 1] + ahead * dy + aside * dx;
        own[likely] = sure;
        late[likely] = probability(out[3]);
        fresh[likely] = probability(out[4]);
        if (alike[i] > rules->unmoved_least && fresh[likely] > rules->unmoved_most)
            fresh[likely] = rules->unmoved_most;
        likely++;
    }
    edgewatch_merge(likely, found_at, own, traced->pieces, traced->begin, traced->end, rules->ends_px, rules->least_ends,
                    rules->merge_px, keep);
    for (int i = 0; i < likely; i++) {
        if (!keep[i])
            continue;
        found_at[2 * kept] = found_at[2 * i];
        found_at[2 * kept + 1] = found_at[2 * i + 1];
        own[kept] = own[i];
        late[kept] = late[i];
        fresh[kept++] = fresh[i];
    }
    free(keep);
    return kept;
}

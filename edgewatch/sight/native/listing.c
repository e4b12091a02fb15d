/* What of a picture is listed: see listing.py. */
#include "glow.h"
#include "ranks.h"
#include "steadiness.h"

typedef struct {
    double least_snr, least_length_px, rate_sure, cut_px, edge_px;
    int32_t width, height;
    uint8_t cut_begin, cut_end, late, edge;
} ListRules;

/* What is listed: streaks (x0 y0 x1 y1), bursts (x y), and what belongs to each. */
typedef struct {
    float *streaks, *snr, *bursts;
    uint8_t *streak_flags, *burst_flags;
    int16_t *arms;
    double track_px, middle_snr, origin_offset_px, origin_error_px;
    int32_t streak_count, burst_count, rate_bursts, remembered;
} Listed;

static int near_edge(const double *at, double margin, const ListRules *rules)
{
    return at[0] < margin || at[1] < margin || at[0] > rules->width - 1 - margin || at[1] > rules->height - 1 - margin;
}

/* Of n lines, from begin to end, with their snr, those that are streaks; of m bursts, beside `olds` that are remembered,
 * those that are news; and what is remembered from here on. Returns -1 without memory. */
EXPORT int edgewatch_list(int n, const double *begin, const double *end, const uint8_t *whole, const double *level,
                          double snr_per_dn, int m, const double *at, const double *sure, const double *late,
                          const double *fresh, int olds, const Burst *old, Burst *kept, const Lengths *lengths,
                          const ArmRules *arm_rules, const NewsRules *news_rules, const OriginRules *origin_rules,
                          const ListRules *rules, Listed *listed)
{
    size_t lines = (size_t)n + 1, bursts = (size_t)m + 1;
    double *cut = malloc(sizeof(double) * 7 * lines + sizeof(int64_t) * bursts + lines + bursts);
    if (!cut)
        return -1;
    double *streaks = cut + 2 * lines, *middles = streaks + 4 * lines;
    int64_t *arms = (int64_t *)(middles + lines);
    uint8_t *streak = (uint8_t *)(arms + bursts), *news = streak + lines;
    Apexes apexes = {.at = at, .sure = sure, .late = late, .fresh = fresh, .number = m};
    memcpy(cut, end, sizeof(double) * 2 * (size_t)n);
    int answer = sort_lines(n, begin, cut, whole, m, at, late, olds, old, lengths, arm_rules, streak, arms), count = 0;
    listed->track_px = 0.0;
    for (int i = 0; i < n && !answer; i++) {
        const double *a = begin + 2 * i, *b = cut + 2 * i;
        double gx = b[0] - a[0], gy = b[1] - a[1], length = sqrt(gx * gx + gy * gy), snr = level[i] * snr_per_dn;
        if (!streak[i] || !(snr >= rules->least_snr && length > rules->least_length_px))
            continue;
        const double line[4] = {a[0], a[1], b[0], b[1]};
        for (int k = 0; k < 4; k++) {
            streaks[4 * count + k] = line[k];
            listed->streaks[4 * count + k] = (float)line[k];
        }
        listed->snr[count] = (float)snr;
        middles[count] = snr;
        listed->streak_flags[count] = (near_edge(a, rules->cut_px, rules) ? rules->cut_begin : 0) |
                                      (near_edge(b, rules->cut_px, rules) ? rules->cut_end : 0);
        listed->track_px += length;
        count++;
    }
    listed->streak_count = count;
    listed->middle_snr = count ? middle_of(middles, count) : NAN;
    if (!answer)
        answer = read_origin(count, streaks, origin_rules, &listed->origin_offset_px, &listed->origin_error_px);

    find_news(&apexes, olds, old, rules->rate_sure, lengths, news_rules, news);
    listed->burst_count = listed->rate_bursts = 0;
    for (int j = 0; j < m && !answer; j++) {
        listed->rate_bursts += sure[j] >= rules->rate_sure && news[j] & 2;
        if (!(news[j] & 1))
            continue;
        int k = listed->burst_count++;
        listed->bursts[2 * k] = (float)at[2 * j];
        listed->bursts[2 * k + 1] = (float)at[2 * j + 1];
        listed->arms[k] = (int16_t)arms[j];
        listed->burst_flags[k] = (late[j] > arm_rules->late_sure ? rules->late : 0) |
                                 (near_edge(at + 2 * j, rules->edge_px, rules) ? rules->edge : 0);
    }
    listed->remembered = remember(&apexes, olds, old, news_rules, kept);
    free(cut);
    return answer;
}

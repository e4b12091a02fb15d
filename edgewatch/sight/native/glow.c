/* Which lines are arms of bursts, and which bursts are news: see glow.py. */
#include "glow.h"

/* A line as the tests below read it. */
typedef struct {
    double x, y, ux, uy, length, typical;
    int is_short, straight, whole;
} Line;

static Line line_of(const double *begin, const double *end, int whole, const Lengths *lengths, const ArmRules *rules,
                    uint8_t *streak)
{
    double gx = end[0] - begin[0], gy = end[1] - begin[1], length = sqrt(gx * gx + gy * gy);
    length = length > 1e-6 ? length : 1e-6;
    Line line = {.x = begin[0], .y = begin[1], .ux = gx / length, .uy = gy / length, .length = length, .whole = whole};
    double mx = 0.5 * (begin[0] + end[0]), my = 0.5 * (begin[1] + end[1]);
    double ax = mx - lengths->contact_x, ay = my - lengths->contact_y, away = sqrt(ax * ax + ay * ay);
    double radial = fabs(ax * line.ux + ay * line.uy) / (away > 1e-6 ? away : 1e-6);
    line.typical = lengths->number ? exp(expected(lengths, mx, my)) : INFINITY;
    line.is_short = length < rules->short_share * line.typical;
    line.straight = radial > rules->radial_cos;
    *streak = !rules->from_contact || radial > rules->across_cos || length > rules->across_share * line.typical;
    return line;
}

typedef struct {
    double along, side;
} Position;

static Position position(const Line *line, const double *at)
{
    double dx = at[0] - line->x, dy = at[1] - line->y;
    return (Position){dx * line->ux + dy * line->uy, fabs(dx * line->uy - dy * line->ux)};
}

enum { ENDS = 1, RUNS_ON = 2, ARM = 4 };

/* How a line stands to a burst of this picture. */
static int relation(const Line *line, Position p, double gap, const ArmRules *rules)
{
    double left = line->length - p.along;
    int found = 0;
    if (!(p.side < rules->arm_side_px))
        return 0;
    if (line->straight && p.along > rules->stem_least_px) {
        if (fabs(left) <= rules->arm_gap_px)
            found |= ENDS;
        else if (left > rules->arm_gap_px && (!line->whole || left < rules->short_share * line->typical))
            found |= RUNS_ON;
    }
    if (p.along <= rules->arm_gap_px && p.along >= -gap && (line->is_short || !line->straight))
        found |= ARM;
    if (!line->straight && line->is_short && p.along > -rules->arm_gap_px && left > -rules->arm_gap_px)
        found |= ARM;
    return found;
}

/* Whether a short line points back to a burst of an earlier picture, within reach of its arms. */
static int of_old(const Line *line, const Burst *burst, const ArmRules *rules)
{
    Position p = position(line, (const double[2]){burst->x, burst->y});
    double reach = isfinite(line->typical) ? line->typical * rules->old_reach : 0.0;
    if (!line->is_short || !(p.side < rules->arm_side_px))
        return 0;
    return fabs(p.along) <= rules->arm_gap_px ||
           (!line->straight && p.along > -reach && p.along < line->length + reach);
}

/* Tells n lines that are streaks from arms, given m bursts of this picture and `olds` of earlier ones. Lines that run on
 * from their burst into an arm are cut there (end is changed). Out: streak (n), arms (m). Returns -1 without memory. */
int sort_lines(int n, const double *begin, double *end, const uint8_t *whole, int m, const double *at, const double *late,
               int olds, const Burst *old, const Lengths *lengths, const ArmRules *rules, uint8_t *streak, int64_t *arms)
{
    Line *lines = malloc(sizeof(Line) * ((size_t)n + 1));
    double *cut = malloc(sizeof(double) * ((size_t)n + 1));
    if (!lines || !cut) {
        free(lines);
        free(cut);
        return -1;
    }
    for (int i = 0; i < n; i++) {
        lines[i] = line_of(begin + 2 * i, end + 2 * i, whole[i], lengths, rules, streak + i);
        cut[i] = NAN;
    }
    for (int j = 0; j < m; j++) {
        double gap = late[j] > rules->late_sure ? rules->late_gap_px : rules->arm_gap_px, nearest = INFINITY;
        int stem = -1, stem_found = 0;
        int64_t number = 0;
        for (int i = 0; i < n; i++) {
            Position p = position(lines + i, at + 2 * j);
            int found = relation(lines + i, p, gap, rules);
            if (found & ARM) {
                streak[i] = 0;
                number++;
            }
            if (found & (ENDS | RUNS_ON) && p.side < nearest) { /* one stem leads to a burst, the nearest */
                nearest = p.side;
                stem = i;
                stem_found = found;
            }
        }
        if (stem >= 0) {
            number += 1 + (stem_found & RUNS_ON && !(stem_found & ARM));
            if (stem_found & RUNS_ON && isnan(cut[stem]))
                cut[stem] = position(lines + stem, at + 2 * j).along;
        }
        arms[j] = number > rules->least_arms ? number : rules->least_arms;
    }
    for (int i = 0; i < n; i++) {
        for (int k = 0; k < olds && streak[i]; k++)
            if (of_old(lines + i, old + k, rules))
                streak[i] = 0;
        if (!isnan(cut[i])) {
            end[2 * i] = lines[i].x + cut[i] * lines[i].ux;
            end[2 * i + 1] = lines[i].y + cut[i] * lines[i].uy;
        }
    }
    free(lines);
    free(cut);
    return 0;
}

EXPORT int edgewatch_sort(int n, const double *begin, double *end, const uint8_t *whole, int m, const double *at,
                          const double *late, int olds, const Burst *old, const Lengths *lengths, const ArmRules *rules,
                          uint8_t *streak, int64_t *arms)
{
    return sort_lines(n, begin, end, whole, m, at, late, olds, old, lengths, rules, streak, arms);
}

/* Whether a burst is the same as a remembered one, whose cloud of arms has drifted on along the flight. */
static int is_near(const double *at, const Burst *old, const Lengths *lengths, const NewsRules *rules)
{
    double ax = old->x - lengths->contact_x, ay = old->y - lengths->contact_y, away = sqrt(ax * ax + ay * ay), drift = 0.0;
    away = away > 1e-6 ? away : 1e-6;
    ax /= away;
    ay /= away;
    if (lengths->number) {
        double age = old->age * rules->period_s;
        age = age < rules->drift_s ? age : rules->drift_s;
        drift = rules->drift_share * exp(expected(lengths, old->x, old->y)) / rules->exposure_s * age;
    }
    double gx = at[0] - old->x, gy = at[1] - old->y, on = gx * ax + gy * ay;
    on = on < 0.0 ? 0.0 : on > drift ? drift : on; /* the nearest point of the way it may have come */
    gx -= on * ax;
    gy -= on * ay;
    return gx * gx + gy * gy < rules->same_px * rules->same_px;
}

void find_news(const Apexes *apexes, int olds, const Burst *old, double sure, const Lengths *lengths,
               const NewsRules *rules, uint8_t *news)
{
    for (int j = 0; j < apexes->number; j++) {
        int near = 0;
        if (apexes->late[j] > rules->late_sure)
            for (int k = 0; k < olds; k++)
                if (is_near(apexes->at + 2 * j, old + k, lengths, rules))
                    near |= 1 | (old[k].sure >= sure) << 1;
        news[j] = 0;
        for (int bit = 1; bit <= 2; bit <<= 1)
            if (apexes->fresh[j] >= (near & bit ? rules->fresh_near : rules->fresh_least))
                news[j] |= (uint8_t)bit;
    }
}

int remember(const Apexes *apexes, int olds, const Burst *old, const NewsRules *rules, Burst *kept)
{
    int number = 0;
    for (int k = 0; k < olds; k++)
        if (old[k].age + 1.0 <= rules->pictures) {
            kept[number] = old[k];
            kept[number++].age += 1.0;
        }
    for (int j = 0; j < apexes->number && rules->pictures >= 1; j++)
        kept[number++] = (Burst){apexes->at[2 * j], apexes->at[2 * j + 1], apexes->sure[j], 1.0};
    return number;
}

/* How long streaks are at a distance from the contact point, from those seen lately: see lengths.py. */
#include "lengths.h"
#include "order.h"

/* The table made anew from the streaks kept, cut into parts by distance: distance of each part and its typical logarithm, a
 * median weighted by length that never rises with distance; and the spread of what is longer. Returns -1 without memory. */
static int make_table(LengthMemory *memory, const LengthRules *rules)
{
    int n = memory->kept, parts = n / rules->part_least, number = 0;
    double *places = memory->lengths.places, *typical = memory->lengths.typical, weight = 0.0;
    Key *streaks = malloc((3 * sizeof(Key) + sizeof(double)) * (size_t)n);
    if (!streaks)
        return -1;
    Key *above = streaks + n, *room = above + n;
    double *lengths = (double *)(room + n);
    parts = parts < 1 ? 1 : parts > rules->most_parts ? rules->most_parts : parts;
    for (int i = 0; i < n; i++)
        streaks[i] = (Key){memory->away[i], i};
    sort_keys(streaks, n, room);
    for (int p = 0; p < parts; p++) {
        int from = p * n / parts, to = (p + 1) * n / parts;
        double total = weight;
        places[p] = streaks[(from + to) / 2].key;
        for (int i = from; i < to; i++)
            streaks[i].key = memory->log[streaks[i].index];
        sort_keys(streaks + from, to - from, room);
        for (int i = from; i < to; i++)
            total += lengths[i] = exp(streaks[i].key);
        double half = 0.5 * (weight + total), sum = weight;
        int i = from;
        while (i < to - 1 && (sum += lengths[i]) < half)
            i++;
        typical[p] = streaks[i].key;
        weight = total;
    }
    for (int p = parts - 2; p >= 0; p--)
        typical[p] = typical[p] > typical[p + 1] ? typical[p] : typical[p + 1];
    for (int p = 0; p < parts; p++)
        for (int i = p * n / parts; i < (p + 1) * n / parts; i++)
            if (streaks[i].key > typical[p])
                above[number++].key = streaks[i].key - typical[p];
    sort_keys(above, number, room);
    double spread = number ? rules->middle_spread * above[number / 2].key : 0.0;
    spread = spread > rules->spread_least ? spread : rules->spread_least;
    memory->lengths.spread = spread < rules->spread_most ? spread : rules->spread_most;
    memory->lengths.longest_px = rules->longest_factor * exp(typical[0]);
    memory->lengths.number = parts;
    free(streaks);
    return 0;
}

/* Add n streaks from begin to end (n, 2). Returns -1 without memory. */
EXPORT int edgewatch_learn(int n, const double *begin, const double *end, LengthMemory *memory, const LengthRules *rules)
{
    const Lengths *lengths = &memory->lengths;
    double total = 0.0, straight = 0.0, *away = malloc(2 * sizeof(double) * ((size_t)n + 1)), *log_px = away + n;
    int fresh = 0;
    if (!away)
        return -1;
    for (int i = 0; i < n; i++) {
        double gx = end[2 * i] - begin[2 * i], gy = end[2 * i + 1] - begin[2 * i + 1], length = sqrt(gx * gx + gy * gy);
        double x = 0.5 * (begin[2 * i] + end[2 * i]), y = 0.5 * (begin[2 * i + 1] + end[2 * i + 1]);
        double far = away_px(lengths, x, y), along = fabs(gx * (x - lengths->contact_x) + gy * (y - lengths->contact_y));
        length = length > 1.0 ? length : 1.0;
        total += length;
        if (!(along > rules->radial_cos * length * far))
            continue;
        straight += length;
        away[fresh] = far;
        log_px[fresh++] = log(length);
    }
    memory->all_px = rules->share_keep * memory->all_px + total;
    memory->straight_px = rules->share_keep * memory->straight_px + straight;
    memory->fresh += fresh;
    int most = rules->most_kept, taken = fresh < most ? fresh : most;
    int old = memory->kept + taken > most ? most - taken : memory->kept, gone = memory->kept - old;
    memmove(memory->away, memory->away + gone, sizeof(double) * (size_t)old);
    memmove(memory->log, memory->log + gone, sizeof(double) * (size_t)old);
    memcpy(memory->away + old, away + fresh - taken, sizeof(double) * (size_t)taken);
    memcpy(memory->log + old, log_px + fresh - taken, sizeof(double) * (size_t)taken);
    memory->kept = old + taken;
    free(away);
    if (memory->kept < rules->least_kept || (lengths->number && memory->fresh < memory->kept / rules->new_part))
        return 0;
    memory->fresh = 0;
    return make_table(memory, rules);
}

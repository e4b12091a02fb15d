/* How long streaks are at a distance from the contact point, from those seen lately: see lengths.py. */
#include "kernels.h"

typedef struct {
    double away, log;
    int32_t order;
} Streak;

static int by_away(const void *a, const void *b)
{
    const Streak *one = a, *other = b;
    return one->away < other->away ? -1 : one->away > other->away ? 1 : one->order - other->order;
}

static int by_log(const void *a, const void *b)
{
    const Streak *one = a, *other = b;
    return one->log < other->log ? -1 : one->log > other->log;
}

static int by_value(const void *a, const void *b)
{
    double one = *(const double *)a, other = *(const double *)b;
    return one < other ? -1 : one > other;
}

/* Of n streaks at distances `away` and with logarithms of length `log`, cut into `parts` by distance: distance of each part
 * and its typical logarithm, a median weighted by length that never rises with distance; and the middle of what longer ones
 * have more than is typical, 0 when there are none. Returns -1 without memory. */
EXPORT int edgewatch_typical(int n, const double *away, const double *log, int parts, double *places, double *typical,
                             double *middle)
{
    Streak *streaks = malloc(sizeof(Streak) * ((size_t)n + 1));
    double *above = malloc(sizeof(double) * ((size_t)n + 1)), weight = 0.0;
    int number = 0, answer = -1;
    if (!streaks || !above)
        goto done;
    for (int i = 0; i < n; i++)
        streaks[i] = (Streak){away[i], log[i], i};
    qsort(streaks, (size_t)n, sizeof(Streak), by_away);
    for (int p = 0; p < parts; p++) {
        int from = p * n / parts, to = (p + 1) * n / parts;
        double total = weight;
        places[p] = streaks[(from + to) / 2].away;
        qsort(streaks + from, (size_t)(to - from), sizeof(Streak), by_log);
        for (int i = from; i < to; i++)
            total += exp(streaks[i].log);
        double half = 0.5 * (weight + total), sum = weight;
        int i = from;
        while (i < to - 1 && (sum += exp(streaks[i].log)) < half)
            i++;
        typical[p] = streaks[i].log;
        weight = total;
    }
    for (int p = parts - 2; p >= 0; p--)
        typical[p] = typical[p] > typical[p + 1] ? typical[p] : typical[p + 1];
    for (int p = 0; p < parts; p++)
        for (int i = p * n / parts; i < (p + 1) * n / parts; i++)
            if (streaks[i].log > typical[p])
                above[number++] = streaks[i].log - typical[p];
    qsort(above, (size_t)number, sizeof(double), by_value);
    *middle = number ? above[number / 2] : 0.0;
    answer = 0;
done:
    free(streaks);
    free(above);
    return answer;
}

/* Candidates for bursts: see candidates.py. */
#include "candidates.h"
#include "kernels.h"

/* Votes for meeting points, counted in square cells. */
typedef struct {
    int wide, high;
    float *number, *half, *dense; /* wide * high: votes of a cell; blurred along the row; blurred both ways */
    uint8_t *voted;               /* high: whether any cell of the row has votes */
    int32_t *slot;                /* wide * high: where the sums of a cell's votes are, from 1 on; 0: it has none */
    double *sum;                  /* x and y of the votes of each slot */
    int slots, room;
} Votes;

static int add_vote(Votes *votes, double cell_px, double x, double y)
{
    int row = (int)(y / cell_px), cell = row * votes->wide + (int)(x / cell_px);
    if (!votes->slot[cell]) {
        if (votes->slots == votes->room) {
            double *more = realloc(votes->sum, sizeof(double) * 4 * (size_t)votes->room);
            if (!more)
                return -1;
            votes->sum = more;
            votes->room *= 2;
        }
        votes->sum[2 * votes->slots] = votes->sum[2 * votes->slots + 1] = 0.0;
        votes->slot[cell] = ++votes->slots;
    }
    double *sum = votes->sum + 2 * (votes->slot[cell] - 1);
    sum[0] += x;
    sum[1] += y;
    votes->number[cell] += 1.0f;
    votes->voted[row] = 1;
    return 0;
}

/* Neighbours of a place 0 <= k < n: k - 1 and k + 1, mirrored beyond the ends. */
static inline int before(int k, int n) { return k > 0 ? k - 1 : n > 1 ? 1 : 0; }
static inline int after(int k, int n) { return k + 1 < n ? k + 1 : n > 1 ? n - 2 : 0; }

static void blur_votes(Votes *votes, float near)
{
    int wide = votes->wide, high = votes->high;
    float middle = 1.0f - 2.0f * near;
    for (int y = 0; y < high; y++) {
        const float *row = votes->number + (size_t)y * wide;
        float *half = votes->half + (size_t)y * wide;
        if (!votes->voted[y]) {
            memset(half, 0, sizeof(float) * (size_t)wide);
            continue;
        }
        for (int x = 1; x < wide - 1; x++)
            half[x] = middle * row[x] + near * (row[x - 1] + row[x + 1]);
        half[0] = middle * row[0] + near * 2.0f * row[after(0, wide)];
        half[wide - 1] = middle * row[wide - 1] + near * 2.0f * row[before(wide - 1, wide)];
    }
    for (int y = 0; y < high; y++) {
        const float *own = votes->half + (size_t)y * wide;
        const float *up = votes->half + (size_t)before(y, high) * wide;
        const float *low = votes->half + (size_t)after(y, high) * wide;
        float *dense = votes->dense + (size_t)y * wide;
        for (int x = 0; x < wide; x++)
            dense[x] = middle * own[x] + near * (up[x] + low[x]);
    }
}

/* Mean place of the votes about a cell, weighted as the blur does. */
static void middle_of(const Votes *votes, float near, int x, int y, double *at)
{
    double total[2] = {0.0, 0.0};
    int columns[3] = {before(x, votes->wide), x, after(x, votes->wide)};
    int rows[3] = {before(y, votes->high), y, after(y, votes->high)};
    for (int v = 0; v < 3; v++) {
        for (int u = 0; u < 3; u++) {
            int slot = votes->slot[rows[v] * votes->wide + columns[u]];
            double weight = (v == 1 ? 1.0 - 2.0 * near : near) * (u == 1 ? 1.0 - 2.0 * near : near);
            if (slot) {
                total[0] += weight * votes->sum[2 * slot - 2];
                total[1] += weight * votes->sum[2 * slot - 1];
            }
        }
    }
    float dense = votes->dense[(size_t)y * votes->wide + x];
    at[0] = total[0] / dense;
    at[1] = total[1] / dense;
}

static int densest(const Votes *votes, float near, float least_votes, double *at, int most)
{
    int wide = votes->wide, high = votes->high, found = 0;
    for (int y = 0; y < high; y++) {
        if (!votes->voted[before(y, high)] && !votes->voted[y] && !votes->voted[after(y, high)])
            continue;
        for (int x = 0; x < wide; x++) {
            float own = votes->dense[(size_t)y * wide + x];
            if (own <= least_votes)
                continue;
            int top = 1;
            for (int v = y > 0 ? y - 1 : 0; v <= y + 1 && v < high; v++)
                for (int u = x > 0 ? x - 1 : 0; u <= x + 1 && u < wide; u++)
                    top &= own >= votes->dense[(size_t)v * wide + u];
            if (!top)
                continue;
            if (found < most)
                middle_of(votes, near, x, y, at + 2 * found);
            found++;
        }
    }
    return found;
}

/* The ends of pieces, the begins first, sorted into boxes as wide as the gap that may lie between two of them: number, place,
 * unit vector into the piece, and how far its line is followed beyond the end. */
typedef struct {
    int across, down;
    int32_t *start, *box; /* boxes + 2: a box's first place in the order; box of each end */
    int32_t *number;
    double *x, *y, *ux, *uy, *reach;
} Ends;

static void sort_ends(Ends *ends, const Traced *traced, const CandidateRules *rules)
{
    int n = traced->pieces, boxes = ends->across * ends->down;
    for (int i = 0; i < 2 * n; i++) {
        const double *p = i < n ? traced->begin + 2 * i : traced->end + 2 * (i - n);
        int column = (int)(p[0] / rules->gap_px), row = (int)(p[1] / rules->gap_px);
        column = column < 0 ? 0 : column >= ends->across ? ends->across - 1 : column;
        row = row < 0 ? 0 : row >= ends->down ? ends->down - 1 : row;
        ends->box[i] = row * ends->across + column;
        ends->start[ends->box[i]]++;
    }
    for (int k = 1; k <= boxes; k++)
        ends->start[k] += ends->start[k - 1];
    for (int i = 2 * n - 1; i >= 0; i--) {
        int k = --ends->start[ends->box[i]], a = i < n ? i : i - n;
        const double *p = i < n ? traced->begin + 2 * a : traced->end + 2 * a, *axis = traced->axis + 2 * a;
        ends->number[k] = i;
        ends->x[k] = p[0];
        ends->y[k] = p[1];
        ends->ux[k] = i < n ? axis[0] : -axis[0];
        ends->uy[k] = i < n ? axis[1] : -axis[1];
        ends->reach[k] = fmin(rules->gap_px, rules->gap_lengths * traced->length[a] + 2.0);
    }
}

/* With which of the ends between `from` and `to` in the order end `own` meets; of every two ends the one with the lower
 * number looks for the other, and the two ends of one piece do not meet. along: how far beyond the own end; is, along and
 * hit: as many as there are ends. Returns their number. */
WIDE static int meet(const Ends *ends, int own, int from, int to, int pieces, const CandidateRules *rules,
                     int32_t *restrict is, double *restrict along, int32_t *restrict hit)
{
    const double *restrict x = ends->x, *restrict y = ends->y, *restrict vx = ends->ux, *restrict vy = ends->uy;
    const double *restrict reach = ends->reach;
    const int32_t *restrict number = ends->number;
    double px = x[own], py = y[own], ux = vx[own], uy = vy[own], most = reach[own], gap = rules->gap_px * rules->gap_px;
    double least_sin = rules->least_sin, inner = -rules->inner_px;
    int32_t first = number[own], other = first < pieces ? first + pieces : first - pieces;
    for (int k = from; k < to; k++) {
        double gx = x[k] - px, gy = y[k] - py, cross = ux * vy[k] - uy * vx[k];
        double s = -(gx * vy[k] - gy * vx[k]) / cross, t = -(gx * uy - gy * ux) / cross;
        along[k] = s;
        is[k] = (gx * gx + gy * gy <= gap) & (fabs(cross) > least_sin) & (s > inner) & (s < most) & (t > inner) &
                (t < reach[k]) & (number[k] > first) & (number[k] != other);
    }
    int found = 0;
    for (int k = from; k < to; k++) {
        hit[found] = k;
        found += is[k];
    }
    return found;
}

/* Where lines of pieces meet beyond their ends: the middle of the votes wherever they are dense, in the order of their
 * cells. Room in `at` for `most` points (x, y). Returns their number, which may be more, or -1 without memory. */
static int find_meetings(const Traced *traced, const CandidateRules *rules, double *at, int most)
{
    int n = traced->pieces, height = traced->height, width = traced->width, found = -1;
    double cell_px = rules->cell_px;
    if (n < 2)
        return 0;
    Votes votes = {.wide = (int)(width / cell_px) + 1, .high = (int)(height / cell_px) + 1, .room = 256};
    Ends ends = {.across = (int)(width / rules->gap_px) + 1, .down = (int)(height / rules->gap_px) + 1};
    size_t cells = (size_t)votes.wide * votes.high, count = 2 * (size_t)n;
    char *zero = calloc(cells * 8 + (size_t)votes.high, 1);
    votes.half = malloc(sizeof(float) * 2 * cells);
    votes.sum = malloc(sizeof(double) * 2 * (size_t)votes.room);
    ends.start = calloc((size_t)ends.across * ends.down + 2, sizeof(int32_t));
    ends.x = malloc((6 * sizeof(double) + 4 * sizeof(int32_t)) * count + sizeof(int32_t));
    if (!zero || !votes.half || !votes.sum || !ends.start || !ends.x)
        goto done;
    votes.number = (float *)zero;
    votes.slot = (int32_t *)(zero + 4 * cells);
    votes.voted = (uint8_t *)(zero + 8 * cells);
    votes.dense = votes.half + cells;
    ends.y = ends.x + count;
    ends.ux = ends.y + count;
    ends.uy = ends.ux + count;
    ends.reach = ends.uy + count;
    double *along = ends.reach + count;
    ends.number = (int32_t *)(along + count);
    ends.box = ends.number + count;
    int32_t *is = ends.box + count, *hit = is + count;
    sort_ends(&ends, traced, rules);
    for (int row = 0; row < ends.down; row++) {
        for (int column = 0; column < ends.across; column++) {
            const int32_t *box = ends.start + row * ends.across + column;
            int left = column > 0 ? -1 : 0, right = column + 1 < ends.across ? 2 : 1;
            for (int own = box[0]; own < box[1]; own++) {
                for (int up = row > 0 ? -1 : 0; up <= 1 && row + up < ends.down; up++) {
                    int meetings = meet(&ends, own, box[up * ends.across + left], box[up * ends.across + right], n, rules,
                                        is, along, hit);
                    for (int k = 0; k < meetings; k++) {
                        double mx = ends.x[own] - along[hit[k]] * ends.ux[own];
                        double my = ends.y[own] - along[hit[k]] * ends.uy[own];
                        if (mx > 0.0 && my > 0.0 && mx < width - 1 && my < height - 1 && add_vote(&votes, cell_px, mx, my))
                            goto done;
                    }
                }
            }
        }
    }
    blur_votes(&votes, (float)rules->near);
    found = densest(&votes, (float)rules->near, (float)rules->least_votes, at, most);
done:
    free(zero);
    free(votes.half);
    free(votes.sum);
    free(ends.start);
    free(ends.x);
    return found;
}

WIDE static void halve(const uint8_t *upper, const uint8_t *lower, uint8_t *out, int width)
{
    for (int x = 0; x < width; x++)
        out[x] = (uint8_t)((upper[2 * x] + upper[2 * x + 1] + lower[2 * x] + lower[2 * x + 1] + 2) >> 2);
}

WIDE static void soften(const uint8_t *a, const uint8_t *b, const uint8_t *c, uint16_t *sum, uint8_t *out, int width)
{
    for (int x = 0; x < width; x++)
        sum[x] = (uint16_t)(a[x] + 2 * b[x] + c[x]);
    for (int x = 1; x < width - 1; x++)
        out[x] = (uint8_t)((sum[x - 1] + 2 * sum[x] + sum[x + 1] + 8) >> 4);
    out[0] = (uint8_t)((2 * sum[0] + 2 * sum[1] + 8) >> 4);
    out[width - 1] = (uint8_t)((2 * sum[width - 1] + 2 * sum[width - 2] + 8) >> 4);
}

/* Marks values between the columns `from` and `to` of a row that are above `least` and not below any of their eight
 * neighbours. */
WIDE static void mark_tops(const uint8_t *restrict row, int wide, int from, int to, uint8_t least, uint8_t *restrict top)
{
    const uint8_t *up = row - wide, *low = row + wide;
    for (int x = from; x < to; x++) {
        uint8_t own = row[x];
        top[x] = (own > least) & (own >= row[x - 1]) & (own >= row[x + 1]) & (own >= up[x - 1]) & (own >= up[x]) &
                 (own >= up[x + 1]) & (own >= low[x - 1]) & (own >= low[x]) & (own >= low[x + 1]);
    }
}

/* Spots from which brightness falls off in every direction, in the excess at half its size. Room for that, softened, and
 * for two rows of it. */
static int find_blobs(const Traced *traced, const CandidateRules *rules, const uint8_t *half, uint8_t *soft, uint16_t *sum,
                      uint8_t *top, double *at, int most)
{
    int margin = rules->blob_margin, steps = rules->blob_steps, high = traced->height / 2, wide = traced->width / 2;
    const int32_t *step = rules->blob_step;
    double fall = rules->blob_fall, level = rules->blob_noise * traced->noise;
    uint8_t least = (uint8_t)(level < 2.0 ? 2.0 : level > 255.0 ? 255.0 : level);
    int found = 0;
    for (int y = 0; y < high; y++) {
        int up = y > 0 ? y - 1 : 1, low = y + 1 < high ? y + 1 : high - 2;
        soften(half + (size_t)up * wide, half + (size_t)y * wide, half + (size_t)low * wide, sum,
               soft + (size_t)y * wide, wide);
    }
    for (int y = margin; y < high - margin; y++) {
        const uint8_t *row = soft + (size_t)y * wide;
        mark_tops(row, wide, margin, wide - margin, least, top);
        for (int x = margin; x < wide - margin; x++) {
            uint64_t eight;
            while (x + 8 < wide - margin && (memcpy(&eight, top + x, 8), !eight))
                x += 8;
            if (!top[x])
                continue;
            double limit = 2.0 * (1.0 - fall) * row[x];
            int falls = 1;
            for (int k = 0; k < steps && falls; k++) {
                int away = step[2 * k + 1] * wide + step[2 * k];
                falls = row[x + away] + row[x - away] < limit;
            }
            if (!falls)
                continue;
            if (found < most) {
                at[2 * found] = 2.0 * x + 0.5;
                at[2 * found + 1] = 2.0 * y + 0.5;
            }
            found++;
        }
    }
    return found;
}

enum { SIDE = 4, SPREAD = 16, FRAME = 2 }; /* side of a cell of light; sum of the weights 1 4 6 4 1, and their reach */

/* Sums of four values each, of two rows of the picture at half its size. */
WIDE static void gather(const uint8_t *restrict upper, const uint8_t *restrict lower, uint32_t *restrict cells, int wide)
{
    for (int x = 0; x < wide; x++)
        cells[x] = (uint32_t)(upper[2 * x] + upper[2 * x + 1] + lower[2 * x] + lower[2 * x + 1]);
}

/* Weighted sums of n values with their neighbours two to either side and `apart` from each other. */
WIDE static void spread(const uint32_t *restrict in, int apart, uint32_t *restrict out, int n)
{
    for (int k = 0; k < n; k++)
        out[k] = in[k - 2 * apart] + in[k + 2 * apart] + 4 * (in[k - apart] + in[k + apart]) + 6 * in[k];
}

WIDE static void mark_lights(const uint32_t *restrict row, int frame, int wide, uint32_t least, uint8_t *restrict top)
{
    const uint32_t *up = row - frame, *low = row + frame;
    for (int x = 0; x < wide; x++) {
        uint32_t own = row[x];
        top[x] = (own > least) & (own >= row[x - 1]) & (own >= row[x + 1]) & (own >= up[x - 1]) & (own >= up[x]) &
                 (own >= up[x + 1]) & (own >= low[x - 1]) & (own >= low[x]) & (own >= low[x + 1]);
    }
}

/* Places where much light is gathered and none of `others` points is near. half: the picture at half its size; top: room
 * for a row of it. */
static int find_lights(const Traced *traced, const CandidateRules *rules, const uint8_t *half, uint8_t *top,
                       const double *other, int others, double *at, int most)
{
    int high = traced->height / SIDE, wide = traced->width / SIDE, frame = wide + 2 * FRAME, half_wide = traced->width / 2;
    if (!high || !wide)
        return 0;
    size_t framed = (size_t)frame * (high + 2 * FRAME);
    uint32_t *cells = calloc(2 * framed + (size_t)frame, sizeof(uint32_t));
    if (!cells)
        return -1;
    uint32_t *soft = cells + framed, *down = soft + framed;
    for (int y = 0; y < high; y++)
        gather(half + (size_t)2 * y * half_wide, half + ((size_t)2 * y + 1) * half_wide,
               cells + (size_t)(y + FRAME) * frame + FRAME, wide);
    for (int y = FRAME; y < high + FRAME; y++) {
        spread(cells + (size_t)y * frame, frame, down, frame);
        spread(down + FRAME, 1, soft + (size_t)y * frame + FRAME, wide);
    }
    double level = rules->light_noise * traced->noise * (SIDE / 2 * SPREAD) * (SIDE / 2 * SPREAD);
    double apart = rules->light_apart_px * rules->light_apart_px;
    uint32_t least = level < 1e9 ? (uint32_t)level : 1000000000u;
    int found = 0;
    for (int y = 0; y < high; y++) { /* outside it is dark */
        mark_lights(soft + (size_t)(y + FRAME) * frame + FRAME, frame, wide, least, top);
        for (int x = 0; x < wide; x++) {
            int near = !top[x];
            float px = (float)(SIDE * x) + 0.5f * (SIDE - 1), py = (float)(SIDE * y) + 0.5f * (SIDE - 1);
            for (int k = 0; !near && k < others; k++) {
                float dx = px - (float)other[2 * k], dy = py - (float)other[2 * k + 1];
                near = dx * dx + dy * dy < apart;
            }
            if (near)
                continue;
            if (found < most) {
                at[2 * found] = px;
                at[2 * found + 1] = py;
            }
            found++;
        }
    }
    free(cells);
    return found;
}

EXPORT int edgewatch_candidates(const Traced *traced, const CandidateRules *rules, double *at, int most)
{
    int high = traced->height / 2, wide = traced->width / 2, found, meetings, lights;
    size_t size = (size_t)high * wide;
    uint16_t *sum = malloc(sizeof(uint16_t) * (size_t)wide + 2 * size + (size_t)wide + 1);
    if (!sum)
        return -1;
    uint8_t *half = (uint8_t *)(sum + wide), *soft = half + size, *top = soft + size;
    for (int y = 0; y < high; y++)
        halve(traced->excess + 2 * (size_t)y * traced->width, traced->excess + (2 * (size_t)y + 1) * traced->width,
              half + (size_t)y * wide, wide);
    found = find_blobs(traced, rules, half, soft, sum, top, at, most);
    if (found <= most) {
        meetings = find_meetings(traced, rules, at + 2 * found, most - found);
        found = meetings < 0 ? -1 : found + meetings;
    }
    if (found >= 0 && found <= most) {
        lights = find_lights(traced, rules, half, top, at, found, at + 2 * found, most - found);
        found = lights < 0 ? -1 : found + lights;
    }
    free(sum);
    return found;
}

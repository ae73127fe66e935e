/* Choosing: which candidates to look up next, by upper bounds of what they stand in order by. */
#include "passes.h"
#include <math.h>
#include <stdlib.h>

#define NONE_LEFT -1.0

static uint64_t mix(uint64_t value) {
    value += 0x9E3779B97F4A7C15u;
    value = (value ^ (value >> 30)) * 0xBF58476D1CE4E5B9u;
    value = (value ^ (value >> 27)) * 0x94D049BB133111EBu;
    return value ^ (value >> 31);
}

/* exp(temperature * Gumbel noise) of a seed and a post, as scoring.noise.multipliers has it. */
static double multiplier(uint64_t seed_mixed, uint64_t post, double temperature) {
    double uniform = ((double)(mix(post ^ seed_mixed) >> 12) + 0.5) * 0x1p-52;
    double power = -temperature * log(-log(uniform));
    return exp(power < -600.0 ? -600.0 : power > 600.0 ? 600.0 : power);
}

static double left_of_crowd(double crowd, double share) {
    double left = crowd - share;
    return left < 1e-12 * crowd || left < 0.0 ? 0.0 : left;
}

static void set_bound(Gathering *g, int64_t place, double stranger, double crowd) {
    const Cell *cell = &g->cell[place];
    double most = stranger > 0.0 ? stranger * left_of_crowd(crowd, cell->share) : 0.0;
    double factor = g->plain ? 1.0 : g->factor[place], noise = g->plain ? 1.0 : g->noise[place];
    g->bound[place] = factor > 0.0 ? (cell->known + most) * noise * factor : 0.0;
}

static int make_bounds(Gathering *g) {
    if (g->posts <= g->bound_room)
        return FINE;
    int64_t room = g->room;
    double *bound = realloc(g->bound, (size_t)(3 * room) * sizeof *bound);
    int64_t *front = realloc(g->front, (size_t)room * sizeof *front);
    if (bound)
        g->bound = bound;
    if (front)
        g->front = front;
    if (!bound || !front)
        return NO_MEMORY;
    g->factor = bound + room, g->noise = bound + 2 * room, g->bound_room = room;
    return FINE;
}

/* Bound every candidate: (known + stranger * (crowd's bound - share)) * noise * factor.
 *
 * others is the crowd's bound of posts that are not among the listed. A post seen at seen_ms[i] has the factor unless
 * someone followed or befriended has added an edge since. */
int choose_bounds(Gathering *g, double stranger, double others, int64_t listed, const uint64_t *listed_post,
                  const double *listed_bound, int64_t seen, const uint64_t *seen_post, const double *seen_ms,
                  double factor, uint64_t seed, double temperature) {
    if (make_bounds(g) != FINE)
        return NO_MEMORY;
    uint64_t seed_mixed = mix(seed);
    g->plain = temperature <= 0.0 && (factor == 1.0 || !seen);
    for (int64_t i = 0; !g->plain && i < g->posts; i++) {
        g->factor[i] = 1.0;
        g->noise[i] = temperature > 0.0 ? multiplier(seed_mixed, g->cell[i].post, temperature) : 1.0;
    }
    for (int64_t i = 0; !g->plain && factor != 1.0 && i < seen; i++) {
        int64_t place = place_of(g, seen_post[i]);
        if (place >= 0 && g->cell[place].newest_ms <= seen_ms[i])
            g->factor[place] = factor;
    }
    g->candidates = 0;
    for (int64_t i = 0; i < g->posts; i++) {
        if (g->cell[i].newest_ms == -INFINITY)
            g->bound[i] = NONE_LEFT;
        else
            set_bound(g, i, stranger, others), g->candidates++;
    }
    for (int64_t i = 0; i < listed; i++) {
        int64_t place = place_of(g, listed_post[i]);
        if (place >= 0 && g->bound[place] != NONE_LEFT)
            set_bound(g, place, stranger, listed_bound[i]);
    }
    g->fronted = g->taken = g->found_count = g->looked_up = 0;
    return FINE;
}

/* Bound every candidate by the time of its newest edge, so that the newest are looked up first. */
int choose_newest(Gathering *g) {
    if (make_bounds(g) != FINE)
        return NO_MEMORY;
    g->candidates = 0, g->plain = 1;
    for (int64_t i = 0; i < g->posts; i++) {
        int candidate = g->cell[i].newest_ms != -INFINITY;
        g->bound[i] = candidate ? g->cell[i].newest_ms : NONE_LEFT;
        g->candidates += candidate;
    }
    g->fronted = g->taken = g->found_count = g->looked_up = 0;
    return FINE;
}

static void drop(Gathering *g, int64_t place) {
    if (place >= 0 && g->bound[place] != NONE_LEFT)
        g->bound[place] = NONE_LEFT, g->candidates--;
}

/* Leave posts out. */
void choose_without(Gathering *g, int64_t count, const uint64_t *posts) {
    for (int64_t i = 0; i < count; i++)
        drop(g, place_of(g, posts[i]));
}

/* Leave out all but these posts. */
int choose_only(Gathering *g, int64_t count, const uint64_t *posts) {
    double *kept = malloc((size_t)(count + 1) * sizeof *kept);
    if (!kept)
        return NO_MEMORY;
    for (int64_t i = 0; i < count; i++) {
        int64_t place = place_of(g, posts[i]);
        kept[i] = place < 0 ? NONE_LEFT : g->bound[place];
    }
    for (int64_t place = 0; place < g->posts; place++)
        drop(g, place);
    for (int64_t i = 0; i < count; i++) {
        int64_t place = place_of(g, posts[i]);
        if (kept[i] != NONE_LEFT && g->bound[place] == NONE_LEFT)
            g->bound[place] = kept[i], g->candidates++;
    }
    free(kept);
    return FINE;
}

static int before(const Gathering *g, int64_t a, int64_t b) {
    return g->bound[a] > g->bound[b] || (g->bound[a] == g->bound[b] && a < b);
}

static void sift(const Gathering *g, int64_t *heap, int64_t length, int64_t at) {
    int64_t held = heap[at];
    for (int64_t child; (child = 2 * at + 1) < length; at = child) {
        if (child + 1 < length && before(g, heap[child], heap[child + 1]))
            child++;
        if (!before(g, held, heap[child]))
            break;
        heap[at] = heap[child];
    }
    heap[at] = held;
}

/* Put the next `count` candidates in order behind those that are: a heap with the least on top, then sorted. */
static void extend_front(Gathering *g, int64_t count) {
    int64_t *heap = g->front + g->fronted, held = 0, last = g->fronted ? g->front[g->fronted - 1] : -1;
    int64_t wanted = g->candidates - g->fronted < count ? g->candidates - g->fronted : count;
    for (int64_t i = 0; i < g->posts && wanted; i++) {
        if (held == wanted ? g->bound[i] <= g->bound[heap[0]] : g->bound[i] == NONE_LEFT)
            continue;
        if (last >= 0 && !before(g, last, i))
            continue;
        if (held < wanted) {
            heap[held++] = i;
            for (int64_t at = held / 2 - 1; held == wanted && at >= 0; at--)
                sift(g, heap, held, at);
        } else {
            heap[0] = i;
            sift(g, heap, held, 0);
        }
    }
    for (int64_t length = held; length > 1; length--) {
        int64_t least = heap[0];
        heap[0] = heap[length - 1], heap[length - 1] = least;
        sift(g, heap, length - 1, 0);
    }
    g->fronted += held;
}

static void reach(Gathering *g, int64_t count) {
    if (count > g->fronted && g->fronted < g->candidates) {
        int64_t more = 4 * g->fronted > 2 * count ? 4 * g->fronted : 2 * count;
        extend_front(g, more - g->fronted);
    }
}

/* Take up to `count` of the candidates with the greatest bounds that are left; returns how many. */
int64_t choose_take(Gathering *g, int64_t count, uint64_t *posts) {
    reach(g, g->taken + count);
    int64_t n = 0;
    while (n < count && g->taken < g->fronted)
        posts[n++] = g->cell[g->front[g->taken++]].post;
    return n;
}

/* The summed weight, (bound without noise / greatest)^power, of the candidates that have not been taken. */
double choose_unseen(const Gathering *g, double greatest, double power) {
    int64_t last = g->taken ? g->front[g->taken - 1] : -1;
    double sum = 0.0;
    for (int64_t i = 0; i < g->posts; i++)
        if (g->bound[i] != NONE_LEFT && (last < 0 || before(g, last, i)))
            sum += pow(g->bound[i] / (g->plain ? 1.0 : g->noise[i]) / greatest, power);
    return sum;
}

/* The greatest bound that is left, -1 where nothing is. */
double choose_next_bound(Gathering *g) {
    reach(g, g->taken + 1);
    return g->taken < g->fronted ? g->bound[g->front[g->taken]] : NONE_LEFT;
}

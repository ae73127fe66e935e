/* Gathering: the edges of a circle's rows, added up by post. */
#include "passes.h"
#include <math.h>
#include <stdlib.h>
#include <string.h>

#define AHEAD 12

void gather_free(Gathering *g) {
    if (!g)
        return;
    free(g->cell), free(g->slot), free(g->bound), free(g->front), free(g->found), free(g);
}

static int64_t table_size(int64_t posts) {
    int64_t slots = 1024;
    while (slots < 4 * posts / 2)
        slots *= 2;
    return slots;
}

Gathering *gather_new(int64_t posts) {
    Gathering *g = calloc(1, sizeof *g);
    if (!g)
        return NULL;
    g->room = posts > 256 ? posts : 256;
    g->slots = table_size(g->room);
    g->cell = malloc((size_t)g->room * sizeof *g->cell);
    g->slot = calloc((size_t)g->slots, sizeof *g->slot);
    if (!g->cell || !g->slot) {
        gather_free(g);
        return NULL;
    }
    return g;
}

/* Empty a gathering, keeping its memory. */
void gather_reset(Gathering *g) {
    memset(g->slot, 0, (size_t)g->slots * sizeof *g->slot);
    g->posts = g->edges = g->markers = 0;
    g->fronted = g->taken = g->candidates = g->found_count = g->looked_up = 0;
}

/* Hashes are random, so their upper bits are a place in the table. */
static inline int64_t first_slot(const Gathering *g, uint64_t post) {
    return (int64_t)((post >> 20) & (uint64_t)(g->slots - 1));
}

int64_t place_of(const Gathering *g, uint64_t post) {
    int64_t at = first_slot(g, post);
    while (g->slot[at]) {
        if (g->cell[g->slot[at] - 1].post == post)
            return g->slot[at] - 1;
        at = (at + 1) & (g->slots - 1);
    }
    return -1;
}

static int make_room(Gathering *g, int64_t more) {
    int64_t wanted = g->posts + more;
    if (wanted > g->room) {
        int64_t room = wanted > 2 * g->room ? wanted : 2 * g->room;
        Cell *cell = realloc(g->cell, (size_t)room * sizeof *cell);
        if (!cell)
            return NO_MEMORY;
        g->cell = cell, g->room = room;
    }
    if (5 * wanted > 4 * g->slots) {
        int64_t slots = table_size(wanted);
        uint32_t *slot = calloc((size_t)slots, sizeof *slot);
        if (!slot)
            return NO_MEMORY;
        free(g->slot);
        g->slot = slot, g->slots = slots;
        for (int64_t place = 0; place < g->posts; place++) {
            int64_t at = first_slot(g, g->cell[place].post);
            while (slot[at])
                at = (at + 1) & (slots - 1);
            slot[at] = (uint32_t)(place + 1);
        }
    }
    return FINE;
}

static inline Cell *cell_of(Gathering *g, uint64_t post) {
    int64_t at = first_slot(g, post);
    uint32_t held;
    while ((held = g->slot[at])) {
        if (g->cell[held - 1].post == post)
            return &g->cell[held - 1];
        at = (at + 1) & (g->slots - 1);
    }
    g->slot[at] = (uint32_t)(g->posts + 1);
    Cell *cell = &g->cell[g->posts++];
    cell->post = post, cell->known = 0.0, cell->share = 0.0, cell->newest_ms = -INFINITY;
    return cell;
}

static int add_row(Gathering *g, const Rule *rule, const char *row, int64_t edges, double affinity, int tie,
                   double t_ms) {
    const int plain = !rule->power && rule->exact;
    for (int64_t i = 0; i < edges; i++) {
        uint64_t entry[2];
        memcpy(entry, row + 16 * i, sizeof entry);
        if (i + AHEAD < edges) {
            uint64_t later;
            memcpy(&later, row + 16 * (i + AHEAD), sizeof later);
            __builtin_prefetch(&g->slot[first_slot(g, later)]);
        }
        uint32_t code = (uint32_t)(entry[1] & 0xFFFFu), kind = code & (CREATION - 1u);
        if (code & RETRACTED)
            continue;
        if (kind == MARKER) {
            g->markers++;
            continue;
        }
        if ((int64_t)kind >= rule->codes)
            return UNKNOWN_CODE;
        double at_ms = (double)(entry[1] >> 16), age_ms = t_ms - at_ms, fresh, crowd_fresh;
        if (plain)
            fresh = crowd_fresh = age_ms > 0.0 ? decay(age_ms / rule->scale_ms) : 1.0;
        else
            fresh = freshness(rule, age_ms), crowd_fresh = crowd_freshness(rule, age_ms);
        Cell *cell = cell_of(g, entry[0]);
        cell->known += affinity * (rule->weights[kind] * fresh);
        cell->share += rule->weights[kind] * crowd_fresh;
        if (tie && at_ms > cell->newest_ms)
            cell->newest_ms = at_ms;
    }
    g->edges += edges;
    return FINE;
}

/* Add rows, one behind the other: lengths[i] bytes each, affinity[i] the reader's to their person, ties[i] whether that
 * person is followed or befriended. Stops at an edge whose kind the policy was not compiled for. */
int gather_add(Gathering *g, const Rule *rule, int64_t count, const char *rows, const int64_t *lengths,
               const double *affinity, const uint8_t *ties, double t_ms) {
    int64_t more = 0;
    for (int64_t i = 0; i < count; i++)
        more += lengths[i] / 16;
    int status = make_room(g, more);
    for (int64_t i = 0; i < count && status == FINE; rows += lengths[i++])
        status = add_row(g, rule, rows, lengths[i] / 16, affinity[i], ties[i], t_ms);
    return status;
}

/* Make posts candidates that no edge of the circle has brought. */
int gather_insert(Gathering *g, int64_t count, const uint64_t *posts) {
    int status = make_room(g, count);
    for (int64_t i = 0; i < count && status == FINE; i++) {
        Cell *cell = cell_of(g, posts[i]);
        if (cell->newest_ms == -INFINITY)
            cell->newest_ms = 0.0;
    }
    return status;
}

/* Turn to posts from beyond the ties: what were candidates are none any more; all other posts with an edge of the circle
 * are, and so are these. */
int gather_turn(Gathering *g, int64_t count, const uint64_t *posts) {
    for (int64_t i = 0; i < g->posts; i++)
        g->cell[i].newest_ms = g->cell[i].newest_ms == -INFINITY ? 0.0 : NAN;
    int status = gather_insert(g, count, posts);
    for (int64_t i = 0; i < g->posts; i++)
        if (isnan(g->cell[i].newest_ms))
            g->cell[i].newest_ms = -INFINITY;
    return status;
}

/* Copy out how many posts, edges and marker entries there are. */
void gather_counts(const Gathering *g, int64_t *counts) {
    counts[0] = g->posts, counts[1] = g->edges, counts[2] = g->markers;
}

/* Copy the candidates out, in no order: posts with an edge by someone followed or befriended. Returns how many. */
int64_t gather_candidates(const Gathering *g, uint64_t *post, double *known, double *share, double *newest_ms) {
    int64_t n = 0;
    for (int64_t i = 0; i < g->posts; i++) {
        const Cell *cell = &g->cell[i];
        if (cell->newest_ms == -INFINITY)
            continue;
        post[n] = cell->post, known[n] = cell->known, share[n] = cell->share, newest_ms[n++] = cell->newest_ms;
    }
    return n;
}

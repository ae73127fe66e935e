/* The passes of a feed read over edges, candidates and posts. See scoring/compiled.py for how Python calls them.
 *
 * Times are Unix milliseconds as doubles where they are computed with. Every function is pure but for the gathering it
 * is handed: no clock, no files, no globals. Integers in rows and posts are little-endian. */
#ifndef WAXWANE_PASSES_H
#define WAXWANE_PASSES_H

#include <stdint.h>

#define CREATION 0x4000u
#define RETRACTED 0x8000u
#define MARKER 0x3FFFu

enum { FINE = 0, UNKNOWN_CODE = -1, NO_MEMORY = -2, BROKEN_VALUE = -3 };

/* A compiled policy, as scoring.ranking.Ranking has it. */
typedef struct {
    int32_t power;        /* 0: 2^(-age / scale); 1: (1 + age / scale)^(-exponent) */
    int32_t exact;        /* whether the crowd decays by the curve itself */
    double scale_ms;      /* the half-life, or the scale of the power */
    double exponent;
    double stranger;      /* affinity of the crowd */
    int64_t codes;        /* length of weights */
    const double *weights;
    int64_t terms;        /* half-lives of the bank */
    const double *half_lives_ms;
    const double *coefficients;
} Rule;

/* Who reads: what decides which posts may be shown. */
typedef struct {
    uint64_t reader;
    int64_t people;           /* the circle */
    const uint64_t *person;   /* rising */
    const uint8_t *relation;  /* of the reader to each */
    int64_t marks;            /* pairs of hash and stamp: who befriended or blocks the reader */
    const uint64_t *mark;
    int64_t forms_length;     /* what is asked for, with newlines between; length 0: everything */
    const char *forms;
    int64_t topics_length;
    const char *topics;
} Who;

/* One post with an edge by somebody of the circle. */
typedef struct {
    uint64_t post;
    double known;      /* what the circle's edges add to its score */
    double share;      /* the circle's share in its crowd */
    double newest_ms;  /* newest edge by someone followed or befriended, -inf where there is none */
} Cell;

/* A post that was looked up and may be shown. */
typedef struct {
    double score;      /* the contract's, seen factor included */
    double order;      /* what it stands in order by: with randomness */
    double key;        /* order, rounded to the digits that count */
    double posted_ms;
    int64_t nth;       /* number of the look-up that found it */
    int64_t id_length;
    const char *id;
} Found;

typedef struct {
    int64_t posts, room;
    Cell *cell;
    int64_t slots;            /* of the table, a power of two; each holds a place in `cell` plus 1 */
    uint32_t *slot;
    int64_t edges, markers;
    double *bound, *factor, *noise;
    int plain;                /* no factors and no noise: all are 1, and not written down */
    int64_t bound_room;
    int64_t *front;           /* candidates in falling order of bound */
    int64_t fronted, taken, candidates;
    int64_t found_count, found_room, looked_up;
    Found *found;
} Gathering;

double freshness(const Rule *rule, double age_ms);
double crowd_freshness(const Rule *rule, double age_ms);
double decay(double half_lives);
double tie_key(double score);
int64_t place_of(const Gathering *g, uint64_t post);

#endif

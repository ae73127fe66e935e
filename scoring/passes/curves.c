/* Curves: what is left of an edge at its age. */
#include "passes.h"
#include <math.h>
#include <string.h>

/* Digest of the sources, so that a stale library is noticed. */
const char built_from[] = BUILT_FROM;

#define STEP_BITS 9
#define STEPS (1 << STEP_BITS)
#define MOST 1000.0 /* half-lives; from there on the library's exp2 looks after the smallest numbers */

/* 2^(-i / STEPS), filled from the library's exp2 when the passes are loaded. */
static double table[STEPS];

__attribute__((constructor)) static void fill_table(void) {
    for (int i = 0; i < STEPS; i++)
        table[i] = exp2(-(double)i / STEPS);
}

/* 2^(-half_lives), for 0 or more, to some 1e-15: whole part, step of the table, and the rest by its power series. */
double decay(double half_lives) {
    if (!(half_lives < MOST))
        return exp2(-half_lives);
    double scaled = half_lives * STEPS;
    int64_t steps = (int64_t)scaled;
    double x = (scaled - (double)steps) * (-0.69314718055994530942 / STEPS);
    double rest = 1.0 + x * (1.0 + x * (0.5 + x * (1.0 / 6.0 + x * (1.0 / 24.0))));
    uint64_t bits = (uint64_t)(1023 - (steps >> STEP_BITS)) << 52;
    double whole;
    memcpy(&whole, &bits, sizeof whole);
    return whole * table[steps & (STEPS - 1)] * rest;
}

double freshness(const Rule *rule, double age_ms) {
    if (!(age_ms > 0.0))
        return 1.0;
    return rule->power ? pow(1.0 + age_ms / rule->scale_ms, -rule->exponent) : decay(age_ms / rule->scale_ms);
}

/* What running sums decay by: the same combination of half-lives. */
double crowd_freshness(const Rule *rule, double age_ms) {
    if (rule->exact)
        return freshness(rule, age_ms);
    double age = age_ms > 0.0 ? age_ms : 0.0, sum = 0.0;
    for (int64_t i = 0; i < rule->terms; i++)
        if (rule->coefficients[i] != 0.0)
            sum += rule->coefficients[i] * decay(age / rule->half_lives_ms[i]);
    return sum;
}

/* Round a score to the digits that count in an order; scoring.topk.tie_key does the same. */
double tie_key(double score) {
    int exponent;
    double mantissa = frexp(score, &exponent);
    return ldexp(nearbyint(ldexp(mantissa, 33)), exponent - 33);
}

#include "posts.h"
#include "passes.h"
#include <math.h>
#include <string.h>

int64_t u16(const char *at) {
    uint16_t value;
    memcpy(&value, at, sizeof value);
    return value;
}

double f64(const char *at) {
    double value;
    memcpy(&value, at, sizeof value);
    return value;
}

uint64_t u64(const char *at) {
    uint64_t value;
    memcpy(&value, at, sizeof value);
    return value;
}

int read_post(const char *value, int64_t length, int64_t terms, Post *post) {
    if (length < POST_HEADER)
        return BROKEN_VALUE;
    post->flags = (unsigned char)value[1], post->audience = (unsigned char)value[2];
    post->edges = u16(value + 4), post->kinds = u16(value + 6), post->id_length = u16(value + 8);
    post->form_length = (unsigned char)value[3], post->topics_length = u16(value + 14);
    post->form_at = POST_HEADER + post->id_length + u16(value + 10);
    post->topics_at = post->form_at + post->form_length + u16(value + 12);
    post->edges_at = post->topics_at + post->topics_length + 8 * u16(value + 16);
    post->sums_at = post->edges_at + 8 * post->edges;
    post->posted_ms = f64(value + 20);
    post->author = u64(value + 36);
    return post->sums_at + post->kinds * (KIND_HEAD + 8 * terms) <= length ? FINE : BROKEN_VALUE;
}

/* For each post and each half-life, log2 of the post's decayed count plus now over the half-life: a number that stays
 * the same as time passes; NaN where the post has no edge. places[i] is that of half-life i among the terms. */
int post_marks(int64_t count, const char *values, const int64_t *lengths, int64_t terms, int64_t boards,
               const int64_t *places, const double *half_lives_ms, double now_ms, double *marks) {
    for (int64_t i = 0; i < count; values += lengths[i++]) {
        Post post;
        int status = read_post(values, lengths[i], terms, &post);
        if (status != FINE)
            return status;
        for (int64_t j = 0; j < boards; j++) {
            double total = 0.0;
            for (int64_t k = 0; k < post.edges; k++) {
                double at_ms = (double)(u64(values + post.edges_at + 8 * k) >> 16);
                total += exp2((at_ms - now_ms) / half_lives_ms[j]);
            }
            const char *kind = values + post.sums_at;
            for (int64_t k = 0; k < post.kinds; k++, kind += KIND_HEAD + 8 * terms)
                total += f64(kind + KIND_HEAD + 8 * places[j]) * exp2((f64(kind + 8) - now_ms) / half_lives_ms[j]);
            *marks++ = total > 0.0 ? log2(total) + now_ms / half_lives_ms[j] : NAN;
        }
    }
    return FINE;
}

/* A post's value, as service/store/scripts/lib/post.lua lays it out: read without copying. */
#ifndef WAXWANE_POSTS_H
#define WAXWANE_POSTS_H

#include <stdint.h>

#define POST_HEADER 44
#define KIND_HEAD 16

typedef struct {
    int flags, audience;
    int64_t edges, kinds, id_length, edges_at, sums_at;
    int64_t form_at, form_length, topics_at, topics_length;
    uint64_t author;
    double posted_ms;
} Post;

int64_t u16(const char *at);
double f64(const char *at);
uint64_t u64(const char *at);

/* Read a value whose sums have so many terms; BROKEN_VALUE where it is shorter than it says. */
int read_post(const char *value, int64_t length, int64_t terms, Post *post);

#endif

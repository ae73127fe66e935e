/* Judging: posts that were looked up, their crowd, their score, and whether the reader may see them. */
#include "passes.h"
#include "posts.h"
#include <math.h>
#include <stdlib.h>
#include <string.h>

#define WITHDRAWN 1
#define RECORDED 2
#define SLACK (1.0 + 1e-9)

enum { NO_TIE, FOLLOW, FRIEND, MUTE, BLOCK };
enum { EVERYONE, FOLLOWERS, FRIENDS };

static int relation_to(const Who *who, uint64_t person) {
    int64_t low = 0, high = who->people;
    while (low < high) {
        int64_t middle = (low + high) / 2;
        if (who->person[middle] < person)
            low = middle + 1;
        else
            high = middle;
    }
    return low < who->people && who->person[low] == person ? who->relation[low] : NO_TIE;
}

static int marked(const Who *who, uint64_t person, int relation) {
    for (int64_t i = 0; i < who->marks; i++)
        if (who->mark[2 * i] == person && (int)(who->mark[2 * i + 1] & 0xFFFFu) == relation)
            return 1;
    return 0;
}

/* Whether the reader may see a post, as service.feed.visible.Gate says. */
static int lets_through(const Who *who, const Post *post) {
    if (!(post->flags & RECORDED) || (post->flags & WITHDRAWN) || post->author == who->reader)
        return 0;
    int relation = relation_to(who, post->author);
    if (relation == MUTE || relation == BLOCK || marked(who, post->author, BLOCK))
        return 0;
    switch (post->audience) {
    case EVERYONE:
        return 1;
    case FOLLOWERS:
        return relation == FOLLOW || relation == FRIEND;
    case FRIENDS:
        return marked(who, post->author, FRIEND);
    default:
        return 0;
    }
}

/* Whether one of the items, which have newlines between, is on the list, which has too. */
static int any_listed(const char *list, int64_t list_length, const char *items, int64_t items_length) {
    for (int64_t start = 0, end; start < items_length; start = end + 1) {
        const char *stop = memchr(items + start, '\n', (size_t)(items_length - start));
        end = stop ? stop - items : items_length;
        for (int64_t from = 0, to; from < list_length; from = to + 1) {
            const char *rest = memchr(list + from, '\n', (size_t)(list_length - from));
            to = rest ? rest - list : list_length;
            if (to - from == end - start && !memcmp(list + from, items + start, (size_t)(to - from)))
                return 1;
        }
    }
    return 0;
}

/* Whether a post has one of the forms and one of the topics that are asked for. */
static int asked_for(const Who *who, const char *value, const Post *post) {
    return (!who->forms_length ||
            any_listed(who->forms, who->forms_length, value + post->form_at, post->form_length)) &&
           (!who->topics_length ||
            any_listed(who->topics, who->topics_length, value + post->topics_at, post->topics_length));
}

/* The weighted, decayed sum over every edge of a post. */
static int crowd_of(const Rule *rule, const char *value, const Post *post, double t_ms, double *crowd) {
    double sum = 0.0;
    for (int64_t i = 0; i < post->edges; i++) {
        uint64_t stamp;
        memcpy(&stamp, value + post->edges_at + 8 * i, sizeof stamp);
        int64_t kind = (int64_t)(stamp & (CREATION - 1u));
        if (kind >= rule->codes)
            return UNKNOWN_CODE;
        sum += rule->weights[kind] * crowd_freshness(rule, t_ms - (double)(stamp >> 16));
    }
    const char *at = value + post->sums_at;
    for (int64_t i = 0; i < post->kinds; i++, at += KIND_HEAD + 8 * rule->terms) {
        int64_t kind = u16(at) & (CREATION - 1u);
        if (kind >= rule->codes)
            return UNKNOWN_CODE;
        double age_ms = t_ms - f64(at + 8), followed = 0.0;
        for (int64_t j = 0; j < rule->terms; j++)
            if (rule->coefficients[j] != 0.0)
                followed += rule->coefficients[j] * f64(at + KIND_HEAD + 8 * j) * exp2(-age_ms / rule->half_lives_ms[j]);
        sum += rule->weights[kind] * followed;
    }
    *crowd = sum;
    return FINE;
}

static Found *new_found(Gathering *g) {
    if (g->found_count == g->found_room) {
        int64_t room = g->found_room ? 2 * g->found_room : 128;
        Found *found = realloc(g->found, (size_t)room * sizeof *found);
        if (!found)
            return NULL;
        g->found = found, g->found_room = room;
    }
    return &g->found[g->found_count++];
}

/* Judge posts: the values of what was taken, one behind the other, an empty one where there is none. They must stay
 * where they are until what was found has been ranked. */
int judge(Gathering *g, const Rule *rule, const Who *who, int64_t count, const uint64_t *posts, const char *values,
          const int64_t *lengths, double t_ms) {
    for (int64_t i = 0; i < count; values += lengths[i++]) {
        int64_t nth = g->looked_up++, place = place_of(g, posts[i]);
        Post post;
        if (!lengths[i] || place < 0)
            continue;
        int status = read_post(values, lengths[i], rule->terms, &post);
        if (status != FINE)
            return status;
        if (!lets_through(who, &post) || !asked_for(who, values, &post))
            continue;
        const Cell *cell = &g->cell[place];
        double crowd, left = 0.0;
        if ((status = crowd_of(rule, values, &post, t_ms, &crowd)) != FINE)
            return status;
        if (crowd - cell->share > 0.0 && crowd - cell->share >= 1e-12 * crowd)
            left = crowd - cell->share;
        Found *found = new_found(g);
        if (!found)
            return NO_MEMORY;
        found->score = (cell->known + rule->stranger * left) * (g->plain ? 1.0 : g->factor[place]);
        found->order = found->score * (g->plain ? 1.0 : g->noise[place]);
        found->key = tie_key(found->order);
        found->posted_ms = post.posted_ms;
        found->nth = nth;
        found->id_length = post.id_length, found->id = values + POST_HEADER;
    }
    return FINE;
}

static int by_id(const Found *a, const Found *b) {
    size_t shared = (size_t)(a->id_length < b->id_length ? a->id_length : b->id_length);
    int order = memcmp(a->id, b->id, shared);
    return order ? order : (a->id_length > b->id_length) - (a->id_length < b->id_length);
}

static int by_posted(const void *left, const void *right) {
    const Found *a = left, *b = right;
    if (a->posted_ms != b->posted_ms)
        return a->posted_ms > b->posted_ms ? -1 : 1;
    return by_id(a, b);
}

static int by_key(const void *left, const void *right) {
    const Found *a = left, *b = right;
    if (a->key != b->key)
        return a->key > b->key ? -1 : 1;
    return by_posted(left, right);
}

/* Put what was found in order, the best first, or with `newest` what was posted last. */
void judge_rank(Gathering *g, int newest) {
    if (g->found_count)
        qsort(g->found, (size_t)g->found_count, sizeof *g->found, newest ? by_posted : by_key);
}

/* How many of what was found, from the front, stand certainly before all that has no greater bound than this one. */
int64_t judge_certain(const Gathering *g, double next_bound) {
    int64_t n = 0;
    while (n < g->found_count && next_bound * SLACK < g->found[n].order)
        n++;
    return n;
}

/* How many were found. */
int64_t judge_count(const Gathering *g) {
    return g->found_count;
}

/* Copy out the first `count` in order: number of the look-up, score, order. Returns how many there were. */
int64_t judge_found(const Gathering *g, int64_t count, int64_t *nth, double *score, double *order) {
    int64_t n = count < g->found_count ? count : g->found_count;
    for (int64_t i = 0; i < n; i++)
        nth[i] = g->found[i].nth, score[i] = g->found[i].score, order[i] = g->found[i].order;
    return n;
}

/* Least-loaded on two different servers of all, first come first served, written plainly: the yardstick for the
   compiled Python loop. It keeps the same sums: sojourn and waiting times with their histograms, and the time that
   servers spend with each number of tasks. */
#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

enum { ROOM = 256, BINS = 96 << 9, LEVELS = 1024 };
typedef struct { double finish, arrival, need; } Task;
typedef struct { double next, free_at, counted, area, busy; int64_t head, held; Task tasks[ROOM]; } Server;
typedef struct { double sojourn, waiting, levels[LEVELS]; int64_t completed, delayed, sojourns[BINS], waits[BINS]; } Sums;

static uint64_t raw(uint64_t *s) {
    uint64_t out = s[0] + s[1] + s[3]++;
    s[0] = s[1] ^ (s[1] >> 11);
    s[1] = s[2] + (s[2] << 3);
    s[2] = ((s[2] << 24) | (s[2] >> 40)) + out;
    return out;
}

static uint64_t below(uint64_t word, uint64_t bound, uint64_t *coin) {
    unsigned __int128 product = (unsigned __int128)word * bound;
    *coin = (uint64_t)product;
    return product >> 64;
}

static int64_t bin(double time) {
    int64_t bits;
    memcpy(&bits, &time, 8);
    int64_t place = (bits >> 43) - ((1023 - 40) << 9);
    return place < 0 ? 0 : place >= BINS ? BINS - 1 : place;
}

static void account(Server *v, Sums *sums, double now) {
    double span = now - v->counted;
    v->counted = now;
    v->area += v->held * span;
    v->busy += v->held > 0 ? span : 0;
    sums->levels[v->held < LEVELS - 1 ? v->held : LEVELS - 1] += span;
}

static void settle(Server *v, Sums *sums, double now) {
    while (v->next <= now) {
        double leaves = v->next;
        account(v, sums, leaves);
        Task *task = &v->tasks[v->head];
        v->head = (v->head + 1) & (ROOM - 1);
        v->next = --v->held > 0 ? v->tasks[v->head].finish : INFINITY;
        double sojourn = leaves - task->arrival, waiting = sojourn - task->need;
        if (waiting <= 1e-13 * leaves) waiting = 0;
        sums->sojourn += sojourn, sums->waiting += waiting;
        sums->completed++, sums->delayed += waiting > 0;
        sums->sojourns[bin(sojourn)]++, sums->waits[bin(waiting)]++;
    }
}

void *make(int64_t servers) {
    Server *all = calloc(servers, sizeof(Server));
    for (int64_t v = 0; v < servers; v++) all[v].next = INFINITY;
    return all;
}

/* Serve `count` tasks whose gaps and requirements are given; returns the time of the last arrival. */
double serve(Server *all, Sums *sums, uint64_t *words, uint64_t servers, double now, double rate,
             const double *gaps, const double *needs, int64_t count) {
    for (int64_t k = 0; k < count; k++) {
        uint64_t coin;
        now += gaps[k] / rate;
        uint64_t one = below(raw(words), servers, &coin), other = below(raw(words), servers - 1, &coin);
        other += other >= one;
        settle(&all[one], sums, now);
        settle(&all[other], sums, now);
        int64_t first = all[one].held, second = all[other].held;
        Server *v = &all[(second < first) | ((second == first) & (int)(coin >> 63)) ? other : one];
        if (v->held == ROOM) abort();
        account(v, sums, now);
        v->free_at = (v->free_at > now ? v->free_at : now) + needs[k];
        v->tasks[(v->head + v->held++) & (ROOM - 1)] = (Task){v->free_at, now, needs[k]};
        if (v->held == 1) v->next = v->free_at;
    }
    return now;
}

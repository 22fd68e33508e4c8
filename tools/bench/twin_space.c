/* The C twin of the elastic kernel in three dimensions. FROZEN: do not improve it.
 *
 * As for twin_elastic.c: speed is stated as a ratio to this program, so it stays as it was when
 * first written: plain scalar C, one particle at a time, xoshiro256++ seeded by splitmix64, the
 * functions of libm, two int conversions per flight to tally it. A mistake in the physics would be
 * a reason to change it; a faster way to write it is not.
 *
 * A particle starts at the left contact by the cosine law, anywhere in the cross-section, and flies
 * straight until one of these happens:
 *   collision    after an exponential path of mean PATH: any direction of the sphere is as likely;
 *   side wall    with probability SPECULARITY a mirror, else the cosine law about the inward
 *                normal;
 *   plane        across the channel: it passes, or the component along the channel is reversed;
 *                transmission T, or T u^2/(T u^2 + 1 - T) for a thin tunnel barrier, u the cosine
 *                to the channel;
 *   contact      its end.
 * Each of them is an event. What is left of the free path lasts beyond walls and planes. Without
 * walls only the component along the channel matters, and no other is followed.
 *
 * Tallies, in units of a cell: for each direction a difference array of (count, place) pairs. A
 * flight, here all the way in one direction, has the weight 1/|u|, its path per length along the
 * channel. At its start and its end (weight, weight times place in the cell) are added and
 * subtracted, so the path within a cell is the sum of count up to it minus its place; over twice
 * the histories that is the occupation of the half space. At each plane and contact: arrivals from
 * either side, and the 1/|u| of crossings; 2/0.01 stands for it where |u| < 0.01, which has the
 * same mean and a finite variance. What the left contact emits, of occupation 1, is not in them.
 *
 * usage: twin_space LENGTH PATH CELLS HISTORIES SEED WIDTH HEIGHT SPECULARITY
 *                   [POSITION:T or POSITION:T:tunnel ...]
 * WIDTH 0: no walls. PATH may be `inf`; positions ascend, 0 < position < LENGTH. Prints JSON.
 */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#define TWO_PI 6.283185307179586
#define GRAZING 0.01

typedef struct {
    double count, place;
} end_point;

typedef struct {
    double position, transmission;
    int tunnel;
} plane;

typedef struct {
    int64_t arrived[2]; /* from the left, from the right */
    /* sums of 1/|u|: moving right or left, before it (on its left) or behind it */
    double right_before, left_before, left_behind, right_behind;
} crossings;

typedef struct {
    int cells, planes;
    double path; /* this and the sizes in units of a cell */
    double width, height, specularity;
    plane *plane; /* [planes + 2]; the outer ones are the contacts */
} channel;

typedef struct {
    end_point *plus, *minus; /* [cells + 1] */
    crossings *crossed;      /* [planes + 2] */
    int64_t transmitted, events;
} tallies;

typedef struct {
    double x, y, z;
    double ux, uy, uz;
    double weight; /* 1/|ux| */
    double begin;  /* where its flight began */
    int segment;   /* between plane[segment] and plane[segment + 1] */
} particle;

typedef struct {
    uint64_t s[4];
} generator;

static inline uint64_t rotate_left(uint64_t x, int k)
{
    return (x << k) | (x >> (64 - k));
}

/* xoshiro256++ 1.0, Blackman & Vigna, ACM Trans. Math. Softw. 47 (2021) 36 */
static inline uint64_t next(generator *g)
{
    uint64_t *s = g->s;
    const uint64_t result = rotate_left(s[0] + s[3], 23) + s[0];
    const uint64_t t = s[1] << 17;

    s[2] ^= s[0];
    s[3] ^= s[1];
    s[1] ^= s[2];
    s[0] ^= s[3];
    s[2] ^= t;
    s[3] = rotate_left(s[3], 45);
    return result;
}

/* splitmix64, Steele, Lea & Flood, OOPSLA 2014 */
static uint64_t splitmix(uint64_t *state)
{
    uint64_t z = (*state += 0x9e3779b97f4a7c15);

    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9;
    z = (z ^ (z >> 27)) * 0x94d049bb133111eb;
    return z ^ (z >> 31);
}

/* 52 bits and a half: never 0, never 1 */
static inline double uniform(generator *g)
{
    return ((double)(next(g) >> 12) + 0.5) * 0x1.0p-52;
}

static inline double free_path(const channel *c, generator *g)
{
    return -c->path * log(uniform(g));
}

static inline double density(double weight)
{
    return weight * GRAZING > 1 ? 2 / GRAZING : weight;
}

static inline void tally(end_point *ends, double x, double weight)
{
    const int cell = (int)x;

    ends[cell].count += weight;
    ends[cell].place += weight * (x - cell);
}

/* Ends a flight where the particle is; the next begins there. */
static inline void tally_flight(tallies *t, particle *a)
{
    if (a->ux > 0) {
        tally(t->plus, a->begin, a->weight);
        tally(t->plus, a->x, -a->weight);
    } else {
        tally(t->minus, a->x, a->weight);
        tally(t->minus, a->begin, -a->weight);
    }
    a->begin = a->x;
}

/* The flux is uniform in the square of the cosine to the normal. */
static inline void start(const channel *c, generator *g, particle *a, int walls)
{
    const double square = uniform(g);

    a->ux = sqrt(square);
    if (walls) {
        const double across = sqrt(1 - square);
        const double azimuth = TWO_PI * uniform(g);

        a->uy = across * cos(azimuth);
        a->uz = across * sin(azimuth);
        a->y = c->width * uniform(g);
        a->z = c->height * uniform(g);
    }
    a->weight = 1 / a->ux;
}

static inline void collide(tallies *t, generator *g, particle *a, int walls)
{
    tally_flight(t, a);
    a->ux = 2 * uniform(g) - 1;
    if (walls) {
        const double across = sqrt(1 - a->ux * a->ux);
        const double azimuth = TWO_PI * uniform(g);

        a->uy = across * cos(azimuth);
        a->uz = across * sin(azimuth);
    }
    a->weight = 1 / fabs(a->ux);
}

/* `normal` and `along`: components of the direction across the wall, and along it besides ux. */
static inline void meet_wall(const channel *c, tallies *t, generator *g, particle *a,
                             double *normal, double *along)
{
    if (uniform(g) < c->specularity) {
        *normal = -*normal;
        return;
    }
    const double square = uniform(g);
    const double flat = sqrt(1 - square);
    const double azimuth = TWO_PI * uniform(g);

    tally_flight(t, a);
    *normal = *normal > 0 ? -sqrt(square) : sqrt(square);
    *along = flat * sin(azimuth);
    a->ux = flat * cos(azimuth);
    a->weight = 1 / fabs(a->ux);
}

/* At a plane or a contact; returns whether the particle is still in the channel. */
static inline int meet(const channel *c, tallies *t, generator *g, particle *a)
{
    const int right = a->ux > 0;
    const int node = a->segment + right;
    const plane *met = &c->plane[node];
    crossings *here = &t->crossed[node];
    const double crossing = density(a->weight);
    double chance = met->transmission;

    here->arrived[!right]++;
    if (right)
        here->right_before += crossing;
    else
        here->left_behind += crossing;
    if (node == 0 || node == c->planes + 1) {
        tally_flight(t, a);
        t->transmitted += right;
        return 0;
    }
    if (met->tunnel) {
        const double square = chance * a->ux * a->ux;

        chance = square / (square + 1 - chance);
    }
    if (uniform(g) < chance) {
        if (right)
            here->right_behind += crossing;
        else
            here->left_before += crossing;
        a->segment += right ? 1 : -1;
    } else {
        if (right)
            here->left_before += crossing;
        else
            here->right_behind += crossing;
        tally_flight(t, a);
        a->ux = -a->ux;
    }
    return 1;
}

/* From the left contact until it reaches a contact; `walls` is known when this is compiled. */
static inline void follow(const channel *c, tallies *t, generator *g, const int walls)
{
    particle a = {0};
    double left = free_path(c, g); /* what is left of the way to the next collision */
    int64_t events = 0;

    start(c, g, &a, walls);
    for (;;) {
        const int right = a.ux > 0;
        const double end = c->plane[a.segment + right].position;
        double ahead = (right ? end - a.x : a.x - end) * a.weight;
        int wall = 0;

        if (walls) {
            const double side = a.uy > 0 ? (c->width - a.y) / a.uy : -a.y / a.uy;
            const double level = a.uz > 0 ? (c->height - a.z) / a.uz : -a.z / a.uz;

            if (side < ahead) {
                ahead = side;
                wall = 1;
            }
            if (level < ahead) {
                ahead = level;
                wall = 2;
            }
        }
        const int collision = left < ahead;
        const double step = collision ? left : ahead;

        events++;
        a.x += step * a.ux;
        if (walls) {
            a.y += step * a.uy;
            a.z += step * a.uz;
        }
        if (collision) {
            left = free_path(c, g);
            collide(t, g, &a, walls);
            continue;
        }
        left -= ahead;
        if (walls && wall == 1) {
            a.y = a.uy > 0 ? c->width : 0;
            meet_wall(c, t, g, &a, &a.uy, &a.uz);
        } else if (walls && wall == 2) {
            a.z = a.uz > 0 ? c->height : 0;
            meet_wall(c, t, g, &a, &a.uz, &a.uy);
        } else {
            a.x = end;
            if (!meet(c, t, g, &a))
                break;
        }
    }
    t->events += events;
}

/* of the processor, for this program: others on the machine take none of it */
static double seconds_now(void)
{
    struct timespec now;

    clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

static void *zeros(size_t number, size_t size)
{
    void *array = calloc(number, size);

    if (!array) {
        fprintf(stderr, "twin_space: out of memory\n");
        exit(1);
    }
    return array;
}

static channel read_channel(int argc, char **argv)
{
    const double length = strtod(argv[1], NULL);
    channel c = {.cells = atoi(argv[3]), .planes = argc - 9};
    const double scale = c.cells / length;

    c.path = strtod(argv[2], NULL) * scale;
    c.width = strtod(argv[6], NULL) * scale;
    c.height = strtod(argv[7], NULL) * scale;
    c.specularity = strtod(argv[8], NULL);
    if (!(length > 0 && c.path > 0 && c.cells > 0)) {
        fprintf(stderr, "twin_space: LENGTH, PATH and CELLS must be positive\n");
        exit(2);
    }
    if (!(c.width >= 0 && (c.width == 0 || c.height > 0))) {
        fprintf(stderr, "twin_space: WIDTH and HEIGHT must be positive, or WIDTH 0\n");
        exit(2);
    }
    c.plane = zeros((size_t)c.planes + 2, sizeof *c.plane);
    c.plane[c.planes + 1].position = c.cells;
    for (int k = 1; k <= c.planes; k++) {
        plane *p = &c.plane[k];
        char kind[8] = "";

        if (sscanf(argv[8 + k], "%lf:%lf:%7s", &p->position, &p->transmission, kind) < 2 ||
            (*kind && strcmp(kind, "tunnel"))) {
            fprintf(stderr, "twin_space: %s is not POSITION:T or POSITION:T:tunnel\n", argv[8 + k]);
            exit(2);
        }
        p->tunnel = *kind != 0;
        p->position *= scale;
        if (!(p->position > p[-1].position && p->position < c.cells)) {
            fprintf(stderr, "twin_space: positions must ascend within the channel\n");
            exit(2);
        }
    }
    return c;
}

/* All numbers but counts are per history; those of densities are occupations. */
static void print_tallies(const channel *c, const tallies *t, double histories)
{
    const double scale = 1 / (2 * histories);
    end_point plus = {0}, minus = {0};

    /* [arrived from the left, right; right-, left-moving before; left-, right-moving behind] */
    printf("\"crossings\": [");
    for (int k = 0; k <= c->planes + 1; k++) {
        const crossings *at = &t->crossed[k];

        printf("%s[%lld, %lld, %.17g, %.17g, %.17g, %.17g]", k > 0 ? ", " : "",
               (long long)at->arrived[0], (long long)at->arrived[1], at->right_before * scale,
               at->left_before * scale, at->left_behind * scale, at->right_behind * scale);
    }
    printf("], \"profile\": ["); /* [f+, f-] of each cell */
    for (int i = 0; i < c->cells; i++) {
        plus.count += t->plus[i].count;
        minus.count += t->minus[i].count;
        printf("%s[%.17g, %.17g]", i > 0 ? ", " : "", (plus.count - t->plus[i].place) * scale,
               (minus.count - t->minus[i].place) * scale);
    }
    printf("]");
}

int main(int argc, char **argv)
{
    if (argc < 9) {
        fprintf(stderr, "usage: twin_space LENGTH PATH CELLS HISTORIES SEED WIDTH HEIGHT "
                        "SPECULARITY [POSITION:T or POSITION:T:tunnel ...]\n");
        return 2;
    }
    const channel c = read_channel(argc, argv);
    const int64_t histories = strtoll(argv[4], NULL, 10);
    uint64_t seed = strtoull(argv[5], NULL, 10);
    tallies t = {0};
    generator g;

    if (histories <= 0) {
        fprintf(stderr, "twin_space: HISTORIES must be positive\n");
        return 2;
    }
    t.plus = zeros((size_t)c.cells + 1, sizeof *t.plus);
    t.minus = zeros((size_t)c.cells + 1, sizeof *t.minus);
    t.crossed = zeros((size_t)c.planes + 2, sizeof *t.crossed);
    for (int i = 0; i < 4; i++)
        g.s[i] = splitmix(&seed);

    const double started = seconds_now();

    if (c.width > 0) {
        for (int64_t history = 0; history < histories; history++)
            follow(&c, &t, &g, 1);
    } else {
        for (int64_t history = 0; history < histories; history++)
            follow(&c, &t, &g, 0);
    }

    const double seconds = seconds_now() - started;

    printf("{\"events\": %lld, \"seconds\": %.9f, \"histories\": %lld, \"transmitted\": %lld, ",
           (long long)t.events, seconds, (long long)histories, (long long)t.transmitted);
    printf("\"transmission\": %.17g, ", (double)t.transmitted / (double)histories);
    print_tallies(&c, &t, (double)histories);
    printf("}\n");
    return 0;
}

/* The C twin of the relaxing one-dimensional kernel. FROZEN: do not improve it.
 *
 * As for twin_elastic.c: speed is stated as a ratio to this program, so it stays as it was when
 * first written: plain scalar C, one particle at a time, xoshiro256++ seeded by splitmix64, the
 * logarithm of libm (two for each energy drawn), two int conversions per flight to tally it. A
 * mistake in the physics would be a reason to change it; a faster way to write it is not.
 *
 * A particle stands for a piece of the deviation from the reference occupation. It starts at the
 * left contact moving right, at an energy uniform in (0, MU) plus kT times a logistic number.
 * Events along its way:
 *   elastic      it reverses;
 *   kept bath    new energy, uniform in (0, mu of its direction and place) plus kT logistic; mu
 *                is frozen, linear across cells;
 *   randomised   the same with the mean mu, and a random direction;
 *   phonon       to E - W at N + 1 - f(E - W), or to E + W at N + f(E + W), each final direction
 *                with half of that over the phonon's path; f is a frozen occupation of the final
 *                state, linear across bins and cells, 1 below the energy axis and 0 above it; by
 *                thinning: the four together stay below 2 N + 2;
 *   scatterer    it passes with probability T, else reverses.
 * It ends at a contact. An event is any of these, a rejected phonon and the arrival at a contact
 * included.
 *
 * Tallies, in units of a cell: for each energy bin and each direction a difference array of pairs
 * (count, place in its cell): a flight over [a, b] adds at a's cell and subtracts at b's, so the
 * path within a cell is the sum of count up to it minus its place. For all energies together the
 * same pairs weighted by 1 and by the energy (and two columns unused here, for an energy that
 * some events keep). The energy given to the lattice in each cell, the crossings of scatterers.
 *
 * usage: twin_relaxing FILE HISTORIES SEED
 * FILE holds doubles, see `read_problem`. Prints JSON.
 */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

enum { COLUMNS = 12 };

typedef struct {
    int cells, bins, points, fine;   /* fine: entries of the reference for each bin */
    double first, step;              /* the energy axis, meV */
    double mu, kT;                   /* of the source, meV */
    double elastic, kept, randomised; /* events per cell width */
    double phonon, number, bound;    /* of phonons: 1/path, N, attempts; per cell width */
    double quantum;                  /* W, meV */
    double total;                    /* all events per cell width */
    const double *edge;              /* [points + 2], in cells; the outer ones are the contacts */
    const double *transmission;      /* [points + 2] */
    const double *frozen_mu;         /* [3][cells] right, left, mean; in the middle of cells */
    const double *mu_step;           /* [3][cells] its change across each cell */
    const double *reference;         /* [bins * fine] equilibrium occupation */
    const double *value;             /* [2][bins][cells][2] deviation from it, right- and left-moving,
                                      * at both edges of a cell */
    const double *slope;             /* the same: change across the bin */
} problem;

typedef struct {
    double *bins;          /* [bins][cells + 1][4] right (count, place), left (count, place) */
    double *cells;         /* [cells + 1][12] right 6 columns, left 6 columns */
    double *heat;          /* [cells + 1] */
    double *arrived;       /* [points + 2][2] from the left, from the right */
    double *passed;        /* [points + 2][2] */
    double in_left, out_left, out_right; /* energies */
    double transmitted;
    int64_t events;
} tallies;

typedef struct {
    double x, begin; /* now; where its flight began */
    double energy, sign;
    int bin, right, segment; /* segment: between edge[segment] and edge[segment + 1] */
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

/* Energy of a member of F(mu) - F(0). */
static inline double box(double mu, double kT, generator *g)
{
    const double u = uniform(g);
    const double v = uniform(g);

    return mu * u + kT * (log(v) - log(1 - v));
}

static inline int bin_of(const problem *p, double energy)
{
    return (int)floor((energy - p->first) / p->step);
}

/* Adds one end of a flight, with the given sign. */
static inline void tally_end(const problem *p, tallies *t, const particle *a, double x, double sign)
{
    const int cell = (int)x;
    const double place = sign * (x - cell);

    if (a->bin >= 0 && a->bin < p->bins) {
        double *bin = t->bins + 4 * ((size_t)a->bin * (p->cells + 1) + cell) + (a->right ? 0 : 2);

        bin[0] += sign;
        bin[1] += place;
    }
    double *column = t->cells + COLUMNS * cell + (a->right ? 0 : COLUMNS / 2);

    column[0] += sign;
    column[1] += place;
    column[2] += sign * a->energy;
    column[3] += place * a->energy;
}

/* Ends a flight where the particle is; the next begins there. */
static inline void tally_flight(const problem *p, tallies *t, particle *a)
{
    tally_end(p, t, a, a->begin, a->right ? a->sign : -a->sign);
    tally_end(p, t, a, a->x, a->right ? -a->sign : a->sign);
    a->begin = a->x;
}

/* At a scatterer or a contact; returns whether the particle is still in the channel. */
static inline int meet(const problem *p, tallies *t, generator *g, particle *a)
{
    const int node = a->segment + a->right;
    const int from = !a->right;

    t->arrived[2 * node + from] += a->sign;
    if (node == 0) {
        tally_flight(p, t, a);
        t->out_left += a->sign * a->energy;
        return 0;
    }
    if (node == p->points + 1) {
        tally_flight(p, t, a);
        t->transmitted += a->sign;
        t->out_right += a->sign * a->energy;
        return 0;
    }
    if (uniform(g) < p->transmission[node]) {
        t->passed[2 * node + from] += a->sign;
        a->segment += a->right ? 1 : -1;
    } else {
        tally_flight(p, t, a);
        a->right = !a->right;
    }
    return 1;
}

static inline void bath(const problem *p, tallies *t, generator *g, particle *a, int randomised)
{
    const int cell = (int)a->x;
    const size_t i = (size_t)p->cells * (randomised ? 2 : a->right ? 0 : 1) + cell;
    const double mu = p->frozen_mu[i] + (a->x - cell - 0.5) * p->mu_step[i];
    const double energy = box(mu, p->kT, g);

    tally_flight(p, t, a);
    t->heat[cell] += a->sign * (a->energy - energy);
    a->energy = energy;
    a->bin = bin_of(p, energy);
    if (randomised)
        a->right = uniform(g) < 0.5;
}

/* Frozen occupation of right- (0) or left-moving (1) states, `part` of the way through a cell. */
static inline double occupation(const problem *p, int side, double energy, int cell, double part)
{
    const double at = (energy - p->first) / p->step;

    if (at < 0)
        return 1;
    if (at >= p->bins)
        return 0;
    const int bin = (int)at;
    const double equilibrium = p->reference[(int)(at * p->fine)];
    const double t = at - bin - 0.5;
    const size_t i = 2 * (((size_t)side * p->bins + bin) * p->cells + cell);
    const double left = p->value[i] + t * p->slope[i];
    const double right = p->value[i + 1] + t * p->slope[i + 1];

    return equilibrium + left + part * (right - left);
}

/* v: uniform between 0 and the bound of the four rates, in units of half of 1/path */
static inline void phonon(const problem *p, tallies *t, particle *a, double v)
{
    const int cell = (int)a->x;
    const double part = a->x - cell;

    for (int choice = 0; choice < 4; choice++) { /* down right, down left, up right, up left */
        const int down = choice < 2;
        const double energy = a->energy + (down ? -p->quantum : p->quantum);
        const double f = occupation(p, choice % 2, energy, cell, part);

        v -= p->number + (down ? 1 - f : f);
        if (v < 0) {
            tally_flight(p, t, a);
            t->heat[cell] += a->sign * (a->energy - energy);
            a->energy = energy;
            a->bin = bin_of(p, energy);
            a->right = choice % 2 == 0;
            return;
        }
    }
}

static inline void collide(const problem *p, tallies *t, generator *g, particle *a)
{
    double v = p->total * uniform(g);

    if (v < p->elastic) {
        tally_flight(p, t, a);
        a->right = !a->right;
        return;
    }
    v -= p->elastic;
    if (v < p->kept) {
        bath(p, t, g, a, 0);
        return;
    }
    v -= p->kept;
    if (v < p->randomised) {
        bath(p, t, g, a, 1);
        return;
    }
    v -= p->randomised;
    phonon(p, t, a, v / (0.5 * p->phonon));
}

/* From the left contact until it reaches a contact. */
static void follow(const problem *p, tallies *t, generator *g)
{
    particle a = {.sign = 1, .right = 1};
    const double path = 1 / p->total;
    int64_t events = 0;

    a.energy = box(p->mu, p->kT, g);
    a.bin = bin_of(p, a.energy);
    t->in_left += a.energy;
    double left = -path * log(uniform(g)); /* what is left of the way to the next collision */

    for (;;) {
        const double edge = p->edge[a.segment + a.right];
        const double ahead = a.right ? edge - a.x : a.x - edge;

        events++;
        if (left >= ahead) {
            left -= ahead;
            a.x = edge;
            if (!meet(p, t, g, &a))
                break;
        } else {
            a.x += a.right ? left : -left;
            left = -path * log(uniform(g));
            collide(p, t, g, &a);
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

static void *zeros(size_t number)
{
    void *array = calloc(number, sizeof(double));

    if (!array) {
        fprintf(stderr, "twin_relaxing: out of memory\n");
        exit(1);
    }
    return array;
}

static const double *next_array(FILE *file, size_t number)
{
    double *array = zeros(number + 1); /* rounding may put a particle at the very end of a cell */

    if (fread(array, sizeof *array, number, file) != number) {
        fprintf(stderr, "twin_relaxing: the file is too short\n");
        exit(2);
    }
    return array;
}

/* The file: the 13 numbers of `head`, then the arrays. Lengths in nm, energies in meV. */
static problem read_problem(const char *name)
{
    FILE *file = fopen(name, "rb");

    if (!file) {
        fprintf(stderr, "twin_relaxing: cannot open %s\n", name);
        exit(2);
    }
    /* cells, bins, points, fine, length, first energy, energy step, mu, kT, rates per nm: elastic, kept
     * bath, randomised bath, phonons (1/path); W */
    const double *head = next_array(file, 14);
    problem p = {.cells = (int)head[0], .bins = (int)head[1], .points = (int)head[2]};
    const double cell = head[4] / p.cells;

    p.fine = (int)head[3];
    p.first = head[5];
    p.step = head[6];
    p.mu = head[7];
    p.kT = head[8];
    p.elastic = head[9] * cell;
    p.kept = head[10] * cell;
    p.randomised = head[11] * cell;
    p.phonon = head[12] * cell;
    p.quantum = head[13];
    p.number = p.phonon > 0 ? 1 / expm1(p.quantum / p.kT) : 0;
    p.bound = p.phonon * (2 * p.number + 2);
    p.total = p.elastic + p.kept + p.randomised + p.bound;
    p.edge = next_array(file, p.points + 2); /* in cells */
    p.transmission = next_array(file, p.points + 2);
    p.frozen_mu = next_array(file, 3 * (size_t)p.cells);
    p.mu_step = next_array(file, 3 * (size_t)p.cells);
    if (p.phonon > 0) {
        p.reference = next_array(file, (size_t)p.bins * p.fine);
        p.value = next_array(file, 4 * (size_t)p.bins * p.cells);
        p.slope = next_array(file, 4 * (size_t)p.bins * p.cells);
    }
    fclose(file);
    return p;
}

/* Path in a cell of a difference array with the given distance between its entries. */
static double path_in(const double *ends, int stride, int cell)
{
    double sum = 0;

    for (int c = 0; c <= cell; c++)
        sum += ends[(size_t)c * stride];
    return sum - ends[(size_t)cell * stride + 1];
}

/* Per history; five cells from end to end: [cell, number right, left, energy right, left], the
 * number summed over the bins last: it lacks what lies beyond the energy axis. */
static void print_profile(const problem *p, const tallies *t, double histories)
{
    static const int column[4] = {0, 6, 2, 8};

    for (int i = 0; i < 5; i++) {
        const int cell = (int)((int64_t)(p->cells - 1) * i / 4);
        double binned = 0;

        for (int b = 0; b < p->bins; b++)
            for (int side = 0; side < 4; side += 2)
                binned += path_in(t->bins + 4 * (size_t)b * (p->cells + 1) + side, 4, cell);
        printf("%s[%d", i > 0 ? ", " : "", cell);
        for (int k = 0; k < 4; k++)
            printf(", %.17g", path_in(t->cells + column[k], COLUMNS, cell) / histories);
        printf(", %.17g]", binned / histories);
    }
}

int main(int argc, char **argv)
{
    if (argc != 4) {
        fprintf(stderr, "usage: twin_relaxing FILE HISTORIES SEED\n");
        return 2;
    }
    const problem p = read_problem(argv[1]);
    const int64_t histories = strtoll(argv[2], NULL, 10);
    uint64_t seed = strtoull(argv[3], NULL, 10);
    tallies t = {0};
    generator g;

    t.bins = zeros(4 * (size_t)p.bins * (p.cells + 1));
    t.cells = zeros(COLUMNS * (size_t)(p.cells + 1));
    t.heat = zeros(p.cells + 1);
    t.arrived = zeros(2 * (size_t)(p.points + 2));
    t.passed = zeros(2 * (size_t)(p.points + 2));
    for (int i = 0; i < 4; i++)
        g.s[i] = splitmix(&seed);

    const double started = seconds_now();

    for (int64_t history = 0; history < histories; history++)
        follow(&p, &t, &g);

    const double seconds = seconds_now() - started;
    const double n = (double)histories;
    double heat = 0;

    for (int c = 0; c < p.cells; c++)
        heat += t.heat[c];
    printf("{\"events\": %lld, \"seconds\": %.9f, \"histories\": %lld, \"transmission\": %.17g, ",
           (long long)t.events, seconds, (long long)histories, t.transmitted / n);
    printf("\"energy_left\": %.17g, \"energy_right\": %.17g, \"heat\": %.17g, \"crossings\": [",
           (t.in_left - t.out_left) / n, t.out_right / n, heat / n);
    for (int k = 1; k <= p.points; k++)
        printf("%s[%.17g, %.17g, %.17g, %.17g]", k > 1 ? ", " : "", t.arrived[2 * k],
               t.passed[2 * k], t.arrived[2 * k + 1], t.passed[2 * k + 1]);
    printf("], \"profile\": [");
    print_profile(&p, &t, n);
    printf("]}\n");
    return 0;
}

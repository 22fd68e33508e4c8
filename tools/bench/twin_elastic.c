/* The C twin of the elastic one-dimensional kernel. FROZEN: do not improve it.
 *
 * Speed is stated as a ratio to this program, measured in the same run on the same core. That
 * ratio is comparable between machines and between versions only while this side stays as it was
 * when first written: plain scalar C, one particle at a time, xoshiro256++ seeded by splitmix64,
 * the logarithm of libm, two int conversions per flight. A mistake in the physics would be a
 * reason to change it; a faster way to write it is not.
 *
 * A particle starts at the left contact moving right. A flight is one straight segment between
 * events: a reversal (distributed backscattering, mean distance `path`), an encounter with a point
 * scatterer (transmit with probability T, else reverse), or the exit at a contact.
 *
 * Tallies: for each direction a difference array of (count, fraction) pairs, in units of a cell.
 * A flight over [a, b] adds (1, a's fraction within its cell) at a's cell and subtracts the like at
 * b's, so the path within cell c is  sum of count over all cells before c, plus count - fraction of
 * c itself. At each scatterer: arrivals and transmissions from either side.
 *
 * usage: twin_elastic LENGTH PATH CELLS HISTORIES SEED [POSITION:T ...]
 * PATH may be `inf`; positions ascend, 0 < position < LENGTH, in the same unit. Prints JSON.
 */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

typedef struct {
    double count, fraction;
} end_point;

typedef struct {
    int64_t arrived[2], transmitted[2]; /* from the left, from the right */
} crossings;

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

static inline void tally(end_point *ends, double x, double sign)
{
    const int cell = (int)x;

    ends[cell].count += sign;
    ends[cell].fraction += sign * (x - cell);
}

static double occupation(const end_point *ends, int cell, double histories)
{
    double sum = 0;

    for (int c = 0; c <= cell; c++)
        sum += ends[c].count;
    return (sum - ends[cell].fraction) / histories;
}

static double seconds_now(void)
{
    struct timespec now;

    clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

int main(int argc, char **argv)
{
    if (argc < 6) {
        fprintf(stderr, "usage: twin_elastic LENGTH PATH CELLS HISTORIES SEED [POSITION:T ...]\n");
        return 2;
    }
    const double length = strtod(argv[1], NULL);
    const int cells = atoi(argv[3]);
    const double path = strtod(argv[2], NULL) / length * cells; /* in cells, as every place below */
    const int64_t histories = strtoll(argv[4], NULL, 10);
    uint64_t seed = strtoull(argv[5], NULL, 10);
    const int points = argc - 6;

    if (!(length > 0 && path > 0 && cells > 0 && histories > 0)) {
        fprintf(stderr, "twin_elastic: LENGTH, PATH, CELLS and HISTORIES must be positive\n");
        return 2;
    }
    /* edge[0] and edge[points + 1] are the contacts, scatterer k lies at edge[k] */
    double *edge = calloc((size_t)points + 2, sizeof *edge);
    double *transmission = calloc((size_t)points + 2, sizeof *transmission);
    crossings *crossed = calloc((size_t)points + 2, sizeof *crossed);
    end_point *plus = calloc((size_t)cells + 1, sizeof *plus);
    end_point *minus = calloc((size_t)cells + 1, sizeof *minus);

    if (!edge || !transmission || !crossed || !plus || !minus) {
        fprintf(stderr, "twin_elastic: out of memory\n");
        return 1;
    }
    edge[points + 1] = cells;
    for (int k = 1; k <= points; k++) {
        if (sscanf(argv[5 + k], "%lf:%lf", &edge[k], &transmission[k]) != 2) {
            fprintf(stderr, "twin_elastic: %s is not POSITION:T\n", argv[5 + k]);
            return 2;
        }
        edge[k] *= cells / length;
        if (!(edge[k] > edge[k - 1] && edge[k] < cells)) {
            fprintf(stderr, "twin_elastic: positions must ascend within the channel\n");
            return 2;
        }
    }

    generator g;
    for (int i = 0; i < 4; i++)
        g.s[i] = splitmix(&seed);

    int64_t flights = 0, transmitted = 0;
    const double started = seconds_now();

    for (int64_t history = 0; history < histories; history++) {
        double x = 0;
        int segment = 0; /* between edge[segment] and edge[segment + 1] */
        int right = 1;

        for (;;) {
            const double step = -path * log(uniform(&g));
            flights++;
            if (right) {
                double end = x + step;
                const int stopped = end >= edge[segment + 1];
                if (stopped)
                    end = edge[segment + 1];
                tally(plus, x, 1);
                tally(plus, end, -1);
                x = end;
                if (!stopped) {
                    right = 0;
                } else if (segment == points) {
                    transmitted++;
                    break;
                } else {
                    crossings *here = &crossed[segment + 1];
                    here->arrived[0]++;
                    if (uniform(&g) < transmission[segment + 1]) {
                        here->transmitted[0]++;
                        segment++;
                    } else {
                        right = 0;
                    }
                }
            } else {
                double end = x - step;
                const int stopped = end <= edge[segment];
                if (stopped)
                    end = edge[segment];
                tally(minus, end, 1);
                tally(minus, x, -1);
                x = end;
                if (!stopped) {
                    right = 1;
                } else if (segment == 0) {
                    break;
                } else {
                    crossings *here = &crossed[segment];
                    here->arrived[1]++;
                    if (uniform(&g) < transmission[segment]) {
                        here->transmitted[1]++;
                        segment--;
                    } else {
                        right = 1;
                    }
                }
            }
        }
    }

    const double seconds = seconds_now() - started;
    const double n = (double)histories;

    printf("{\"flights\": %lld, \"seconds\": %.9f, \"histories\": %lld, \"transmitted\": %lld, ",
           (long long)flights, seconds, (long long)histories, (long long)transmitted);
    printf("\"transmission\": %.17g, \"crossings\": [", (double)transmitted / n);
    for (int k = 1; k <= points; k++)
        printf("%s[%lld, %lld, %lld, %lld]", k > 1 ? ", " : "", (long long)crossed[k].arrived[0],
               (long long)crossed[k].transmitted[0], (long long)crossed[k].arrived[1],
               (long long)crossed[k].transmitted[1]);
    printf("], \"profile\": [");
    for (int i = 0; i < 5; i++) { /* five cells from end to end: [cell, g+, g-] */
        const int cell = (int)((int64_t)(cells - 1) * i / 4);
        printf("%s[%d, %.17g, %.17g]", i > 0 ? ", " : "", cell, occupation(plus, cell, n),
               occupation(minus, cell, n));
    }
    printf("]}\n");
    return 0;
}

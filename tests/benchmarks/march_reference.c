/* The march in plain C, as a yardstick for the numba kernel: same cells, same rays, same line transfer.
 *
 * A uniform grid of n^3 cells cut into patches of b^3; rays through pixel centres along any direction; velocity constant
 * in each cell; one Gaussian line, windows, 1 - exp(-tau) by polynomials of the same accuracy; channel-centre values.
 * Nothing but C: what vectors there are, the compiler makes (gcc -O3 -march=native). Two forms:
 *   march_rays     one ray at a time, channels innermost
 *   march_packets  sixteen neighbouring rays side by side, rays innermost
 */
#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#define LANES 16
#define NUMBERS 8 /* of a cell: v, 3 gradients (unused), density, 1/b, opacity, emission */
#define LOG2E 1.4426950408889634f
#define LN2 0.6931471805599453f
#define PER_SQRT_PI 0.5641895835477563

typedef struct {
    int n, b, channels;
    const float *const *patches; /* (n/b)^3 arrays of b^3 cells, x fastest */
    double direction[3], start[3], step_x[3], step_y[3], cut;
    int nx, ny;
} Scene;

typedef struct { float tau, energy, v, inv_b; int first, last; } Crossing;

static inline float two_to(float y, float *rest) /* 2^y = scale + scale * rest */
{
    float m = y + 12582912.0f, f = y - (m - 12582912.0f);
    float p = 0.00015461447765119374f;
    p = p * f + 0.0013390866806730628f;
    p = p * f + 0.009618056938052177f;
    p = p * f + 0.055503569543361664f;
    p = p * f + 0.24022650718688965f;
    p = p * f + 0.6931471824645996f;
    int32_t bits;
    memcpy(&bits, &m, 4);
    bits = (int32_t)((uint32_t)bits << 23) + (127 << 23);
    float scale;
    memcpy(&scale, &bits, 4);
    *rest = f * p;
    return scale;
}

static inline float gauss(float u2)
{
    float y = -u2, rest;
    y = y > -126.0f ? y : -126.0f;
    float scale = two_to(y, &rest);
    return scale + scale * rest;
}

static inline float escape_thin(float t)
{
    return ((-0.04167100787162781f * t + 0.1666875034570694f) * t - 0.5f) * t + 1.0f;
}

static inline float escape_moderate(float t)
{
    float p = -2.542885522416327e-05f * t + 0.00020399517961777747f;
    p = p * t - 0.00138841662555933f;
    p = p * t + 0.008329829201102257f;
    p = p * t - 0.041666798293590546f;
    p = p * t + 0.1666673719882965f;
    return (p * t - 0.5f) * t + 1.0f;
}

static inline float escape_any(float t)
{
    float power = -t * LOG2E, rest;
    power = power > -126.0f ? power : -126.0f;
    float scale = two_to(power, &rest);
    float e = (1.0f - scale) - scale * rest;
    return t > 0.0f ? e / t : 1.0f;
}

static int trace(const Scene *s, const double o[3], Crossing *out)
{
    int count = 0, g = s->n / s->b, i[3], step[3];
    double t0 = -1e300, t1 = 1e300, next[3], delta[3];
    for (int a = 0; a < 3; a++) {
        double d = s->direction[a];
        if (d == 0.0) {
            if (o[a] < 0.0 || o[a] >= s->n) return 0;
            continue;
        }
        double p = -o[a] / d, q = (s->n - o[a]) / d;
        t0 = fmax(t0, fmin(p, q));
        t1 = fmin(t1, fmax(p, q));
    }
    if (!(t0 < t1)) return 0;
    for (int a = 0; a < 3; a++) {
        double d = s->direction[a], x = o[a] + t0 * d;
        i[a] = (int)x;
        i[a] = i[a] < 0 ? 0 : i[a] >= s->n ? s->n - 1 : i[a];
        step[a] = d > 0 ? 1 : -1;
        next[a] = d == 0.0 ? 1e300 : (i[a] + (d > 0) - o[a]) / d;
        delta[a] = d == 0.0 ? 1e300 : fabs(1.0 / d);
    }
    double t = t0;
    float middle = 0.5f * (s->channels - 1);
    while (1) {
        int a = next[0] < next[1] ? (next[0] < next[2] ? 0 : 2) : (next[1] < next[2] ? 1 : 2);
        double end = next[a] < t1 ? next[a] : t1;
        if (end > t) {
            int b = s->b, px = i[0] / b, py = i[1] / b, pz = i[2] / b;
            const float *cell = s->patches[(px * g + py) * g + pz]
                + (((i[2] - pz * b) * b + (i[1] - py * b)) * b + (i[0] - px * b)) * NUMBERS;
            float peak = (float)((end - t) * cell[5] * PER_SQRT_PI);
            Crossing *c = out + count;
            c->tau = cell[6] * peak;
            c->energy = cell[7] * peak;
            c->v = cell[0] + middle;
            c->inv_b = cell[5];
            float half = (c->tau <= 1.0f ? (float)s->cut : sqrtf(logf(c->tau) + (float)(s->cut * s->cut))) / c->inv_b;
            float low = c->v - half, high = c->v + half;
            c->first = low > 0.0f ? (int)low + 1 : 0;
            c->last = high < 0.0f ? 0 : high < s->channels - 1 ? (int)high + 1 : s->channels;
            if (c->first < c->last && (c->tau != 0.0f || c->energy != 0.0f)) count++;
            t = end;
        }
        if (next[a] >= t1) return count;
        i[a] += step[a];
        if (i[a] < 0 || i[a] >= s->n) return count;
        next[a] += delta[a];
    }
}

static void origin(const Scene *s, int x, int y, double o[3])
{
    for (int a = 0; a < 3; a++) o[a] = s->start[a] + (x + 0.5) * s->step_x[a] + (y + 0.5) * s->step_y[a];
}

#define CROSS(NAME, ESCAPE)                                                                                          \
    static void NAME(const Crossing *c, float *restrict bright, float *restrict through)                            \
    {                                                                                                                \
        float step = c->inv_b * sqrtf(LOG2E);                                                                        \
        for (int k = c->first; k < c->last; k++) {                                                                   \
            float u = (k - c->v) * step, p = gauss(u * u), t = c->tau * p, g = ESCAPE(t) * through[k];               \
            bright[k] += g * (c->energy * p);                                                                        \
            through[k] -= g * t;                                                                                     \
        }                                                                                                            \
    }
CROSS(cross_thin, escape_thin)
CROSS(cross_moderate, escape_moderate)
CROSS(cross_any, escape_any)

long march_rays(const Scene *s, float *image)
{
    long total = 0;
    Crossing *list = malloc(sizeof(Crossing) * (3 * s->n + 8));
    float *bright = malloc(4 * s->channels), *through = malloc(4 * s->channels);
    for (int y = 0; y < s->ny; y++)
        for (int x = 0; x < s->nx; x++) {
            double o[3];
            origin(s, x, y, o);
            int count = trace(s, o, list);
            total += count;
            for (int k = 0; k < s->channels; k++) { bright[k] = 0.0f; through[k] = 1.0f; }
            for (int i = 0; i < count; i++) {
                if (list[i].tau < 0.05f) cross_thin(list + i, bright, through);
                else if (list[i].tau < 1.0f) cross_moderate(list + i, bright, through);
                else cross_any(list + i, bright, through);
            }
            for (int k = 0; k < s->channels; k++) image[((long)k * s->ny + y) * s->nx + x] = bright[k];
        }
    free(list); free(bright); free(through);
    return total;
}

#define PACKET(NAME, ESCAPE)                                                                                         \
    static void NAME(int first, int last, const float *restrict tau, const float *restrict energy,                  \
                     const float *restrict v, const float *restrict step, float *restrict state)                    \
    {                                                                                                                \
        for (int k = first; k < last; k++) {                                                                         \
            float *restrict bright = state + k * 2 * LANES, *restrict through = bright + LANES;                      \
            for (int l = 0; l < LANES; l++) {                                                                        \
                float u = (k - v[l]) * step[l], p = gauss(u * u), t = tau[l] * p, g = ESCAPE(t) * through[l];        \
                bright[l] += g * (energy[l] * p);                                                                    \
                through[l] -= g * t;                                                                                 \
            }                                                                                                        \
        }                                                                                                            \
    }
PACKET(packet_thin, escape_thin)
PACKET(packet_moderate, escape_moderate)
PACKET(packet_any, escape_any)

long march_packets(const Scene *s, float *image)
{
    long total = 0;
    int most = 3 * s->n + 8, count[LANES];
    Crossing *list = malloc(sizeof(Crossing) * most * LANES);
    float *state = malloc(4L * s->channels * 2 * LANES);
    for (int y0 = 0; y0 < s->ny; y0 += 4)
        for (int x0 = 0; x0 < s->nx; x0 += 4) {
            int rows = 0;
            for (int l = 0; l < LANES; l++) {
                double o[3];
                origin(s, x0 + l % 4, y0 + l / 4, o);
                count[l] = trace(s, o, list + (long)l * most);
                total += count[l];
                rows = count[l] > rows ? count[l] : rows;
            }
            for (int k = 0; k < s->channels; k++)
                for (int l = 0; l < LANES; l++) {
                    state[k * 2 * LANES + l] = 0.0f;
                    state[k * 2 * LANES + LANES + l] = 1.0f;
                }
            for (int r = 0; r < rows; r++) {
                float tau[LANES], energy[LANES], v[LANES], step[LANES], size = 0.0f;
                int first = s->channels, last = 0;
                for (int l = 0; l < LANES; l++) {
                    const Crossing *c = list + (long)l * most + r;
                    int there = r < count[l];
                    tau[l] = there ? c->tau : 0.0f;
                    energy[l] = there ? c->energy : 0.0f;
                    v[l] = there ? c->v : 0.0f;
                    step[l] = there ? c->inv_b * sqrtf(LOG2E) : 0.0f;
                    if (there) {
                        first = c->first < first ? c->first : first;
                        last = c->last > last ? c->last : last;
                        size = tau[l] > size ? tau[l] : size;
                    }
                }
                if (size < 0.05f) packet_thin(first, last, tau, energy, v, step, state);
                else if (size < 1.0f) packet_moderate(first, last, tau, energy, v, step, state);
                else packet_any(first, last, tau, energy, v, step, state);
            }
            for (int k = 0; k < s->channels; k++)
                for (int l = 0; l < LANES; l++)
                    image[((long)k * s->ny + y0 + l / 4) * s->nx + x0 + l % 4] = state[k * 2 * LANES + l];
        }
    free(list); free(state);
    return total;
}

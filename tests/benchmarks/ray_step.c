/* The paraxial ray step and straight flux tubes, written for gcc: what the compiled Python is measured against.

   The state is six rows of n rays: y, p, action, A, C, Maslov index. Every step is drift, kick, drift with one quintic
   spline row of the potential per kick; neighbouring half drifts are joined. */

#include <math.h>
#include <string.h>

#define BLOCK 256

#define STEP(C0, C1, C2, C3, C4, C5)                                                                       \
    double p = P[i], y = Y[i] + drift * p, c = C[i], before = A[i], a = before + drift * c;                \
    double u = (y - start) * inverse, f = floor(u), t = u - f;                                             \
    long j = (long)f & mask;                                                                               \
    double c0 = C0, c1 = C1, c2 = C2, c3 = C3, c4 = C4, c5 = C5;                                           \
    double value = c4 + t * c5, slope = value + t * c5, half_bend = c5;                                    \
    value = c3 + t * value, half_bend = slope + t * half_bend, slope = value + t * slope;                  \
    value = c2 + t * value, half_bend = slope + t * half_bend, slope = value + t * slope;                  \
    value = c1 + t * value, half_bend = slope + t * half_bend, slope = value + t * slope;                  \
    value = c0 + t * value;                                                                                \
    M[i] += a * before < 0 ? 1. : 0.;                                                                      \
    S[i] += .5 * drift * p * p - step * value;                                                             \
    Y[i] = y;                                                                                              \
    P[i] = p - kick_p * slope;                                                                             \
    A[i] = a;                                                                                              \
    C[i] = c - kick_c * half_bend * a;

#define MARCH(NAME, ROW, SIMD, C0, C1, C2, C3, C4, C5)                                                     \
    void NAME(double *state, long n, const double *table, long cells, double start, double inverse,        \
              double step, long steps, int threads)                                                        \
    {                                                                                                      \
        const long mask = cells - 1;                                                                       \
        const double kick_p = step * inverse, kick_c = 2 * kick_p * inverse, half = .5 * step;                 \
        _Pragma("omp parallel for schedule(static) num_threads(threads)")                                  \
        for (long first = 0; first < n; first += BLOCK) {                                                  \
            double w[6][BLOCK];                                                                            \
            double *restrict Y = w[0], *restrict P = w[1], *restrict S = w[2];                             \
            double *restrict A = w[3], *restrict C = w[4], *restrict M = w[5];                             \
            for (int m = 0; m < 6; m++) memcpy(w[m], state + m * n + first, sizeof w[m]);                  \
            for (long s = 0; s < steps; s++) {                                                             \
                const double *restrict row = table + s * (ROW);                                            \
                const double drift = s ? step : half;                                                      \
                SIMD for (int i = 0; i < BLOCK; i++) { STEP(C0, C1, C2, C3, C4, C5) }                      \
            }                                                                                              \
            for (int i = 0; i < BLOCK; i++) {                                                              \
                double p = P[i], before = A[i], a = before + half * C[i];                                  \
                M[i] += a * before < 0 ? 1. : 0.;                                                          \
                Y[i] += half * p;                                                                          \
                S[i] += .5 * half * p * p;                                                                 \
                A[i] = a;                                                                                  \
            }                                                                                              \
            for (int m = 0; m < 6; m++) memcpy(state + m * n + first, w[m], sizeof w[m]);                  \
        }                                                                                                  \
    }

#define CELL(m) row[8 * j + m]
#define PLANE(m) row[m * cells + j]
#define SIMD_LOOP _Pragma("omp simd")

/* cells of eight doubles, left to the compiler, and with the loop over rays declared free of dependences */
MARCH(cells_plain, 8 * cells, , CELL(0), CELL(1), CELL(2), CELL(3), CELL(4), CELL(5))
MARCH(cells_simd, 8 * cells, SIMD_LOOP, CELL(0), CELL(1), CELL(2), CELL(3), CELL(4), CELL(5))
/* one plane of the table per coefficient */
MARCH(planes_simd, 6 * cells, SIMD_LOOP, PLANE(0), PLANE(1), PLANE(2), PLANE(3), PLANE(4), PLANE(5))

/* B-spline weights: fewer numbers to look up, more arithmetic; a row holds cells + 5 weights, two before the first */
#define E(m) row[j + m]
MARCH(weights_simd, cells + 5, SIMD_LOOP,
      (E(0) + E(4) + 26 * (E(1) + E(3)) + 66 * E(2)) * (1 / 120.),
      (E(4) - E(0) + 10 * (E(3) - E(1))) * (1 / 24.),
      (E(0) + E(4) + 2 * (E(1) + E(3)) - 6 * E(2)) * (1 / 12.),
      (E(4) - E(0) - 2 * (E(3) - E(1))) * (1 / 12.),
      (E(0) + E(4) - 4 * (E(1) + E(3)) + 6 * E(2)) * (1 / 24.),
      (E(5) - E(0) + 5 * (E(1) - E(4)) + 10 * (E(3) - E(2))) * (1 / 120.))

static long wrapped(long a, long n)
{
    long r = a % n;
    return r < 0 ? r + n : r;
}

/* straight tubes between neighbours of a closed front of n rays, into cells of a periodic row; one thread */
void straight_tubes(const double *y, const double *flux, long n, double lap, double start, double pitch, long cells,
                    double *out)
{
    memset(out, 0, cells * sizeof *out);
    for (long i = 0; i < n; i++) {
        double a = (y[i] - start) / pitch, b = ((i + 1 < n ? y[i + 1] : y[0] + lap) - start) / pitch;
        if (a > b) { double t = a; a = b; b = t; }
        long first = (long)floor(a), last = (long)floor(b);
        if (first == last) { out[wrapped(first, cells)] += flux[i]; continue; }
        double density = flux[i] / (b - a);
        out[wrapped(first, cells)] += density * (first + 1 - a);
        out[wrapped(last, cells)] += density * (b - last);
        for (long c = first + 1; c < last; c++) out[wrapped(c, cells)] += density;
    }
}

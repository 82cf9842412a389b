/* Frozen-Gaussian sum on a periodic grid, in C: the yardstick of test_sum.py.
   psi(Y) = sqrt(k/2pi) sum ds a (g A + i C)^(1/2) exp(-(k ds^2 (g A^2 + C^2/g)/30)^2)
            exp(ik [S + p (Y - y) + i g (Y - y)^2/2]),   Y_j = (j + 1/2) dy,   0 <= y: any. */
#include <math.h>
#include <stdlib.h>
#include <string.h>

typedef struct { double size, phase; } coefficient;

static coefficient of_ray(double p, double S, double A, double C, double maslov, double a, double ds, double k,
                          double g)
{
    double spread = g * A * A + C * C / g, thin = k * ds * ds * spread / 30.0;
    double turn = (A != 0.0 ? atan(C / (g * A)) : M_PI_2) - M_PI * maslov;
    coefficient c = {ds * a * sqrt(k / (2.0 * M_PI)) * sqrt(sqrt(g * spread)) * exp(-thin * thin), k * S + 0.5 * turn};
    (void)p;
    return c;
}

static long wrap(long j, long n) { long r = j % n; return r < 0 ? r + n : r; }

/* Form 1: from the nearest point outwards, the Gaussian and its phase by recurrence. out: threads x 2n. */
void by_recurrence(const double *y, const double *p, const double *S, const double *A, const double *C,
                   const double *maslov, const double *a, long rays, double ds, double dy, long n, double k, double g,
                   double reach, long threads, double *out)
{
    long half = (long)(reach / sqrt(k * g) / dy) + 1;
    double shrink = exp(-k * g * dy * dy);
    memset(out, 0, sizeof(double) * 2 * n * threads);
#pragma omp parallel for schedule(static, 1) num_threads(threads)
    for (long t = 0; t < threads; t++) {
        double *re = out + 2 * n * t, *im = re + n;
        for (long i = rays * t / threads; i < rays * (t + 1) / threads; i++) {
            coefficient c = of_ray(p[i], S[i], A[i], C[i], maslov[i], a[i], ds, k, g);
            long middle = (long)floor(y[i] / dy);
            double off = (middle + 0.5) * dy - y[i], e = c.size * exp(-0.5 * k * g * off * off);
            double turn = c.phase + k * p[i] * off, step = k * p[i] * dy;
            for (int side = 1; side >= -1; side -= 2) {
                double f = exp(-k * g * (side * off * dy + 0.5 * dy * dy));
                double zr = f * cos(step), zi = side * f * sin(step), wr = e * cos(turn), wi = e * sin(turn);
                long j = wrap(middle, n);
                if (side == 1) { re[j] += wr; im[j] += wi; }
                for (long s = 0; s < half; s++) {
                    double w = wr * zr - wi * zi;
                    wi = wr * zi + wi * zr;
                    wr = w;
                    zr *= shrink;
                    zi *= shrink;
                    j += side;
                    if (j == n) j = 0; else if (j < 0) j = n - 1;
                    re[j] += wr;
                    im[j] += wi;
                }
            }
        }
    }
}

/* Form 2: one table of the Gaussian, times the powers of one complex number in eight lanes.
   out: threads x 2 (n + 2 width), width = 2 half. */
void by_lanes(const double *y, const double *p, const double *S, const double *A, const double *C,
              const double *maslov, const double *a, long rays, double ds, double dy, long n, double k, double g,
              double reach, long threads, double *out)
{
    long half = ((long)(reach / sqrt(k * g) / dy) / 8 + 1) * 8, width = 2 * half, row = n + 2 * width;
    double *table = malloc(sizeof(double) * width);
    for (long j = 0; j < width; j++) table[j] = exp(-0.5 * k * g * (j - half) * dy * (j - half) * dy);
    memset(out, 0, sizeof(double) * 2 * row * threads);
#pragma omp parallel for schedule(static, 1) num_threads(threads)
    for (long t = 0; t < threads; t++) {
        double *re = out + 2 * row * t, *im = re + row, wr[8], wi[8];
        for (long i = rays * t / threads; i < rays * (t + 1) / threads; i++) {
            coefficient c = of_ray(p[i], S[i], A[i], C[i], maslov[i], a[i], ds, k, g);
            long middle = (long)floor(y[i] / dy);
            double off = (middle + 0.5) * dy - y[i], rate = -k * g * off * dy, step = k * p[i] * dy;
            double e = c.size * exp(-0.5 * k * g * off * off - rate * half);
            double turn = c.phase + k * p[i] * off - step * half;
            double f = exp(rate), zr = f * cos(step), zi = f * sin(step);
            wr[0] = e * cos(turn);
            wi[0] = e * sin(turn);
            for (int l = 1; l < 8; l++) {
                wr[l] = wr[l - 1] * zr - wi[l - 1] * zi;
                wi[l] = wr[l - 1] * zi + wi[l - 1] * zr;
            }
            double z8r = zr, z8i = zi;
            for (int s = 0; s < 3; s++) { double w = z8r * z8r - z8i * z8i; z8i *= 2.0 * z8r; z8r = w; }
            double *r = re + wrap(middle, n) + half, *m = im + wrap(middle, n) + half;
            for (long j = 0; j < width; j += 8) {
#pragma omp simd
                for (int l = 0; l < 8; l++) {
                    r[j + l] += table[j + l] * wr[l];
                    m[j + l] += table[j + l] * wi[l];
                    double w = wr[l] * z8r - wi[l] * z8i;
                    wi[l] = wr[l] * z8i + wi[l] * z8r;
                    wr[l] = w;
                }
            }
        }
    }
    free(table);
}

/* Full rays from screen to screen, written for gcc, ray by ray: what the compiled Python is measured against.

   A ray is x, y, px, py, action, Maslov index and one tangent. Between screens it takes drift, kick, drift steps in a
   biquintic spline; near a screen the processor and one step of Chin's scheme A of the right length take it there. */

#include <math.h>

typedef struct {
    const double *table;
    long nx, ny;
    double x0, y0, ix, iy;
} Spline;

typedef struct {
    double w, x, y, xx, xy, yy, xxx, xxy, xyy, yyy;
} Jet;

typedef struct {
    double x, y, px, py, s, ax, ay, bx, by;
} Ray;

#define VALUE(c, t) (c[0] + t * (c[1] + t * (c[2] + t * (c[3] + t * (c[4] + t * c[5])))))
#define FIRST(c, t) (c[1] + t * (2 * c[2] + t * (3 * c[3] + t * (4 * c[4] + t * 5 * c[5]))))
#define SECOND(c, t) (2 * c[2] + t * (6 * c[3] + t * (12 * c[4] + t * 20 * c[5])))
#define THIRD(c, t) (6 * c[3] + t * (24 * c[4] + t * 60 * c[5]))

static inline __attribute__((always_inline)) Jet jet(const Spline *q, double x, double y, int thirds)
{
    double u = (x - q->x0) * q->ix, v = (y - q->y0) * q->iy;
    u = fmin(fmax(u, 0.), q->nx - 1.);
    double fu = fmin(floor(u), q->nx - 2.), fv = floor(v);
    long i = (long)fu, j = (long)fv % q->ny;
    j += j < 0 ? q->ny : 0;
    double s = u - fu, t = v - fv, a[6], b[6], c[6], d[6];
    const double *patch = q->table + 48 * (i * q->ny + j);
    for (int m = 0; m < 6; m++) {
        const double *r = patch + 8 * m;
        a[m] = VALUE(r, t), b[m] = FIRST(r, t), c[m] = SECOND(r, t);
        if (thirds) d[m] = THIRD(r, t);
    }
    double ix = q->ix, iy = q->iy;
    Jet g = {VALUE(a, s), FIRST(a, s) * ix, VALUE(b, s) * iy, SECOND(a, s) * ix * ix, FIRST(b, s) * ix * iy,
             VALUE(c, s) * iy * iy, 0, 0, 0, 0};
    if (thirds)
        g.xxx = THIRD(a, s) * ix * ix * ix, g.xxy = SECOND(b, s) * ix * ix * iy, g.xyy = FIRST(c, s) * ix * iy * iy,
        g.yyy = VALUE(d, s) * iy * iy * iy;
    return g;
}

static inline void drift(Ray *r, double h)
{
    r->x += h * r->px, r->y += h * r->py;
    r->s += .5 * h * (r->px * r->px + r->py * r->py + 1);
    r->ax += h * r->bx, r->ay += h * r->by;
}

static inline void turn(Ray *r, double h, const Jet *g)
{
    r->px -= h * g->x, r->py -= h * g->y, r->s -= h * g->w;
    r->bx -= h * (g->xx * r->ax + g->xy * r->ay), r->by -= h * (g->xy * r->ax + g->yy * r->ay);
}

static inline Jet corrected(const Spline *q, const Ray *r, double e)
{
    Jet g = jet(q, r->x, r->y, 1), u = g;
    u.w = g.w + e * (g.x * g.x + g.y * g.y);
    u.x = g.x + 2 * e * (g.xx * g.x + g.xy * g.y);
    u.y = g.y + 2 * e * (g.xy * g.x + g.yy * g.y);
    u.xx = g.xx + 2 * e * (g.xx * g.xx + g.xy * g.xy + g.xxx * g.x + g.xxy * g.y);
    u.xy = g.xy + 2 * e * (g.xx * g.xy + g.xy * g.yy + g.xxy * g.x + g.xyy * g.y);
    u.yy = g.yy + 2 * e * (g.xy * g.xy + g.yy * g.yy + g.xyy * g.x + g.yyy * g.y);
    return u;
}

/* out: y, py, action, A, C, Maslov index by row, of n rays on each screen */
static void land(Ray r, double maslov, double X, const Spline *q, double c, double *out, long n)
{
    Jet g = jet(q, r.x, r.y, 1);
    double jxx = 1 + c * g.xx, jxy = c * g.xy, jyy = 1 + c * g.yy, over = 1 / (jxx * jyy - jxy * jxy);
    double px = (jyy * r.px - jxy * r.py) * over, py = (jxx * r.py - jxy * r.px) * over;
    double kxx = g.xxx * r.ax + g.xxy * r.ay, kxy = g.xxy * r.ax + g.xyy * r.ay, kyy = g.xyy * r.ax + g.yyy * r.ay;
    double bx = r.bx - c * (kxx * px + kxy * py), by = r.by - c * (kxy * px + kyy * py), ax = r.ax, ay = r.ay;
    r.x += c * g.x, r.y += c * g.y, r.px = px, r.py = py;
    r.ax = jxx * ax + jxy * ay, r.ay = jxy * ax + jyy * ay;
    r.bx = (jyy * bx - jxy * by) * over, r.by = (jxx * by - jxy * bx) * over;
    double gap = X - r.x, time = gap / px, force = -g.x, rate = -(g.xx * px + g.xy * py);
    for (int k = 0; k < 4; k++)
        time -= (time * (px + time * (.5 * force + time * rate / 6)) - gap) / (px + time * (force + .5 * time * rate));
    Jet u = corrected(q, &r, c);
    turn(&r, time / 6, &u), drift(&r, time / 2);
    u = corrected(q, &r, c - time * time / 48);
    turn(&r, time * 2 / 3, &u), drift(&r, time / 2);
    u = corrected(q, &r, c);
    turn(&r, time / 6, &u);
    gap = X - r.x;
    double last = gap / (r.px - gap / r.px * u.x);
    turn(&r, last, &u), drift(&r, last);
    double A = r.ay - r.ax / r.px * r.py, C = r.by + r.ax / r.px * u.y;
    if ((A < 0) != (fmod(maslov, 2) != 0)) maslov += A * C > 0 ? 1 : -1;
    out[0] = r.y, out[n] = r.py, out[2 * n] = r.s, out[3 * n] = A, out[4 * n] = C, out[5 * n] = maslov;
}

/* start: x, y, px, py, action, then the tangent, by row; none of the rays turns back */
void full_rays(const double *start, double *out, long n, const double *screens, long count, const double *table, long nx,
               long ny, const double *box, double step, int threads)
{
    const Spline q = {table, nx, ny, box[0], box[1], box[2], box[3]};
    const double c = step * step / 24;
#pragma omp parallel for schedule(static) num_threads(threads)
    for (long i = 0; i < n; i++) {
        const double *z = start + i;
        Ray r = {z[0], z[n], z[2 * n], z[3 * n], z[4 * n], z[5 * n], z[6 * n], z[7 * n], z[8 * n]};
        double maslov = 0, area = r.px * r.ay - r.py * r.ax;
        for (long k = 0; k < count;) {
            for (; k < count && r.x + .5 * step * r.px >= screens[k]; k++)
                land(r, maslov, screens[k], &q, c, out + 6 * n * k + i, n);
            if (k == count) break;
            drift(&r, .5 * step);
            Jet g = jet(&q, r.x, r.y, 0);
            turn(&r, step, &g), drift(&r, .5 * step);
            double before = area;
            area = r.px * r.ay - r.py * r.ax;
            maslov += (before < 0) != (area < 0);
        }
    }
}

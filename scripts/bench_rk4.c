/* Yardsticks of bench.py: the classical Runge-Kutta scheme on the three-variable convection system in plain C.
   x, y, z hold n states each and are advanced in place by n_step steps of length h. */

typedef struct { double sigma, rho, beta; } parameters;

#define SLOPE(a, b, c, dx, dy, dz)                                                                                     \
    dx = p.sigma * (b - a);                                                                                            \
    dy = a * (p.rho - c) - b;                                                                                          \
    dz = a * b - p.beta * c;

#define STEP(x, y, z)                                                                                                  \
    double k1x, k1y, k1z, k2x, k2y, k2z, k3x, k3y, k3z, k4x, k4y, k4z;                                                 \
    SLOPE(x, y, z, k1x, k1y, k1z)                                                                                      \
    double ax = x + 0.5 * h * k1x, ay = y + 0.5 * h * k1y, az = z + 0.5 * h * k1z;                                     \
    SLOPE(ax, ay, az, k2x, k2y, k2z)                                                                                   \
    double bx = x + 0.5 * h * k2x, by = y + 0.5 * h * k2y, bz = z + 0.5 * h * k2z;                                     \
    SLOPE(bx, by, bz, k3x, k3y, k3z)                                                                                   \
    double cx = x + h * k3x, cy = y + h * k3y, cz = z + h * k3z;                                                       \
    SLOPE(cx, cy, cz, k4x, k4y, k4z)                                                                                   \
    x += h / 6.0 * (k1x + 2.0 * (k2x + k3x) + k4x);                                                                    \
    y += h / 6.0 * (k1y + 2.0 * (k2y + k3y) + k4y);                                                                    \
    z += h / 6.0 * (k1z + 2.0 * (k2z + k3z) + k4z);

/* One trajectory at a time. */
void one_by_one(double *x, double *y, double *z, long n, long n_step, double h, parameters p)
{
    for (long i = 0; i < n; i++) {
        double u = x[i], v = y[i], w = z[i];
        for (long s = 0; s < n_step; s++) {
            STEP(u, v, w)
        }
        x[i] = u;
        y[i] = v;
        z[i] = w;
    }
}

/* 64 trajectories at a time, one array per coordinate, the loop over them inside; n is a multiple of 64. */
void in_lanes(double *x, double *y, double *z, long n, long n_step, double h, parameters p)
{
    for (long first = 0; first < n; first += 64) {
        double u[64], v[64], w[64];
        for (int k = 0; k < 64; k++) {
            u[k] = x[first + k];
            v[k] = y[first + k];
            w[k] = z[first + k];
        }
        for (long s = 0; s < n_step; s++) {
            for (int k = 0; k < 64; k++) {
                double a = u[k], b = v[k], c = w[k];
                STEP(a, b, c)
                u[k] = a;
                v[k] = b;
                w[k] = c;
            }
        }
        for (int k = 0; k < 64; k++) {
            x[first + k] = u[k];
            y[first + k] = v[k];
            z[first + k] = w[k];
        }
    }
}

/* The plain two-product loop that libraries.py compares with: compressed rows of A and of its
 * transpose, one scalar sum per row, OpenMP with a static schedule. The script compiles it with
 * cc -O3 -march=native -fopenmp; without -ffast-math a sum keeps its order, so the compiler adds
 * one product after another. */

#include <math.h>
#include <stddef.h>
#include <stdint.h>

/* y <- A x - alpha y; returns the square of the norm of y. */
static double product(int rows, const int *start, const int *column, const double *value,
                      const double *x, double alpha, double *y) {
    double square = 0.0;
#pragma omp parallel for schedule(static) reduction(+ : square)
    for (int i = 0; i < rows; i++) {
        double sum = 0.0;
        for (int k = start[i]; k < start[i + 1]; k++) sum += value[k] * x[column[k]];
        y[i] = sum - alpha * y[i];
        square += y[i] * y[i];
    }
    return square;
}

static void scale(int count, double factor, double *y) {
#pragma omp parallel for schedule(static)
    for (int i = 0; i < count; i++) y[i] *= factor;
}

/* One product alone, for the check: y <- A x. */
void multiply(int rows, const int *start, const int *column, const double *value, const double *x,
              double *y) {
    product(rows, start, column, value, x, 0.0, y);
}

/* LSQR of Paige and Saunders (1982), undamped; scalars are alpha, rho-bar, phi-bar. */
void iterate(long iterations, int m, int n, const int *start, const int *column,
             const double *value, const int *start_t, const int *column_t, const double *value_t,
             double *u, double *v, double *w, double *x, double *scalars) {
    double alpha = scalars[0], rho_bar = scalars[1], phi_bar = scalars[2];
    for (long step = 0; step < iterations; step++) {
        double beta = sqrt(product(m, start, column, value, v, alpha, u));
        scale(m, 1.0 / beta, u);
        alpha = sqrt(product(n, start_t, column_t, value_t, u, beta, v));
        double rho = hypot(rho_bar, beta), c = rho_bar / rho, s = beta / rho;
        double theta = s * alpha, phi = c * phi_bar;
        rho_bar = -c * alpha;
        phi_bar *= s;
        double along = phi / rho, back = theta / rho, factor = 1.0 / alpha;
#pragma omp parallel for schedule(static)
        for (int j = 0; j < n; j++) {
            v[j] *= factor;
            x[j] += along * w[j];
            w[j] = v[j] - back * w[j];
        }
    }
    scalars[0] = alpha;
    scalars[1] = rho_bar;
    scalars[2] = phi_bar;
}

/* Reads an array once; whole numbers, because their sum may be taken in any order and so as fast
 * as memory delivers. */
uint64_t read_once(size_t count, const uint64_t *array) {
    uint64_t sum = 0;
#pragma omp parallel for schedule(static) reduction(+ : sum)
    for (size_t i = 0; i < count; i++) sum += array[i];
    return sum;
}

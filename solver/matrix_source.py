"""The C source of two small things done to many matrices at once; see `many_matrices`."""

from __future__ import annotations

MATRIX_SOURCE = """
void spread(long frames, long n, long count, const long long *pairs, const double *values, double *H)
{
    for (long f = 0; f < frames; f++, values += count, H += n * n) {
        memset(H, 0, n * n * sizeof(double));
        for (long e = 0; e < count; e++) {
            long row = pairs[2 * e], column = pairs[2 * e + 1];
            H[row * n + column] = H[column * n + row] = values[e];
        }
    }
}

/* Over what is usable, scaled to a unit diagonal; by sweeps over the lower triangle (Goodnight 1979,
   Am Stat 33:149). work holds n (n + 2) vectors. trace is that of the scaled inverses; where inverse is
   null, nothing more is given out. */
void inverses(long frames, long n, lane *work, const double *H, const unsigned char *usable,
              double *inverse, double *trace)
{
    lane *c = work + n * n, *scale = c + n;
    for (long start = 0; start < frames; start += LANE) {
        for (int l = 0; l < LANE; l++) {
            long f = start + l < frames ? start + l : frames - 1;
            const double *own = H + f * n * n;
            double *s = (double *)scale + l, *w = (double *)work + l;
            for (long i = 0; i < n; i++)
                s[i * LANE] = usable[f * n + i] ? 1.0 / sqrt(own[i * n + i]) : 0.0;
            for (long i = 0; i < n; i++) {
                for (long j = 0; j < i; j++)
                    w[(i * n + j) * LANE] = own[i * n + j] * s[i * LANE] * s[j * LANE];
                w[(i * n + i) * LANE] = 1.0;
            }
        }
        for (long k = 0; k < n; k++) {
            lane d = all(1.0) / work[k * n + k];
            for (long i = 0; i < n; i++)
                c[i] = i > k ? work[i * n + k] : work[k * n + i];
            c[k] = all(0.0);
            for (long i = 0; i < n; i++) {
                lane part = c[i] * d, *row = work + i * n;
                for (long j = 0; j <= i; j++)
                    row[j] -= part * c[j];
            }
            for (long i = 0; i < n; i++)
                work[i > k ? i * n + k : k * n + i] = c[i] * d;
            work[k * n + k] = -d;
        }
        for (int l = 0; l < LANE && start + l < frames; l++) {
            trace[start + l] = 0.0;
            for (long i = 0; i < n; i++)
                if (usable[(start + l) * n + i])
                    trace[start + l] -= ((double *)work)[(i * n + i) * LANE + l];
            for (long i = 0; i < n && inverse; i++)
                for (long j = 0; j <= i; j++) {
                    const double *s = (const double *)scale + l;
                    double x = -((double *)work)[(i * n + j) * LANE + l] * s[i * LANE] * s[j * LANE];
                    inverse[(start + l) * n * n + i * n + j] = x;
                    inverse[(start + l) * n * n + j * n + i] = x;
                }
        }
    }
}
"""

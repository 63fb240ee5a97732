"""The C source of several series smoothed at once, each with its own weight; see `process_evidence`."""

from __future__ import annotations

SERIES_SOURCE = """
/* Of A = W + r D'D, for each series: (y - x)'W(y - x) + r |Dx|^2 at its minimum, and log det A, infinite where
   rounding spoils A. L'DL row by row, a vector of series at a time. y, W: (frames, count);
   squares: (frames, order + 1), the entries of D'D from the diagonal down; work: frames (order + 2) vectors. */
void smooth_series(long frames, long order, long count, const double *y, const double *W,
                   const double *squares, const double *differences, const double *ratios, lane *work,
                   double *rss, double *determinant)
{
    const long room = order + 2;
    for (long start = 0; start < count; start += LANE) {
        lane r, log_sum = all(0.0), product = all(1.0), sum = all(0.0), rough = all(0.0);
        mask good = truth(all(0.0) == all(0.0));
        long which[LANE];
        for (int l = 0; l < LANE; l++) {
            which[l] = start + l < count ? start + l : count - 1;
            ((double *)&r)[l] = ratios[which[l]];
        }
        for (long k = 0; k < frames; k++) {
            lane *row = work + k * room, v[8];
            const double *s = squares + k * (order + 1);
            lane w = set(W, which, 1, k * count), d = r * s[0] + w;
            lane z = w * set(y, which, 1, k * count);
            long reach = k < order ? k : order;
            for (long j = reach; j >= 1; j--) {
                const lane *before = row - j * room;
                v[j] = r * squares[(k - j) * (order + 1) + j];
                for (long m = j + 1; m <= reach; m++)
                    v[j] -= v[m] * before[m - j];
                row[j] = v[j] * before[0];
                d -= v[j] * row[j];
                z -= row[j] * before[order + 1];
            }
            good &= truth(d > all(0.0));
            product *= d;
            if (k % 8 == 7 || k == frames - 1) {
                for (int l = 0; l < LANE; l++)
                    ((double *)&log_sum)[l] += log(((double *)&product)[l]);
                product = all(1.0);
            }
            row[0] = all(1.0) / d;
            row[order + 1] = z;
        }
        for (long k = frames - 1; k >= 0; k--) {
            lane *row = work + k * room, x = row[order + 1] * row[0];
            for (long j = 1; j <= order && k + j < frames; j++)
                x -= row[j * room + j] * row[j * room + order + 1];
            row[order + 1] = x;
            lane away = set(y, which, 1, k * count) - x;
            sum += away * away * set(W, which, 1, k * count);
            if (k + order < frames) {
                lane bend = all(0.0);
                for (long j = 0; j <= order; j++)
                    bend += row[j * room + order + 1] * differences[j];
                rough += bend * bend;
            }
        }
        sum += r * rough;
        for (int l = 0; l < LANE && start + l < count; l++) {
            int sound = ((long long *)&good)[l] != 0;
            rss[start + l] = sound ? ((double *)&sum)[l] : INFINITY;
            determinant[start + l] = sound ? ((double *)&log_sum)[l] : INFINITY;
        }
    }
}
"""

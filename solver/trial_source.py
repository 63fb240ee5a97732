"""The C source of a trial's system over all frames, the third part of the compiled kernel.

Frames are eliminated one after the other. What elimination touches at any time are the blocks between
the frames of one window of the process: tiles of n rows and columns, column by column, rows filled
up to whole vectors. They fit the cache, whatever the length of the trial.
"""

from __future__ import annotations

TRIAL_SOURCE = """
#ifdef __AVX512F__
#define WIDE 8
#define HIGH 3
#else
#define WIDE 4
#define HIGH 1
#endif

/* C -= A B, or C = A B, over `high` vectors of rows and `wide` columns; entry (c, j) of B is
   b[c * down + j * across]. */
INLINE void patch(lane *C, const lane *A, const double *b, long count, long rows, long down, long across,
                  const int high, const int wide, const int anew)
{
    lane sum[HIGH * WIDE];
    #pragma GCC unroll 32
    for (int i = 0; i < high * wide; i++)
        sum[i] = all(0.0);
    for (long c = 0; c < count; c++, A += rows, b += down)
        #pragma GCC unroll 8
        for (int j = 0; j < wide; j++) {
            #pragma GCC unroll 4
            for (int i = 0; i < high; i++)
                sum[j * high + i] += A[i] * b[j * across];
        }
    #pragma GCC unroll 8
    for (int j = 0; j < wide; j++)
        #pragma GCC unroll 4
        for (int i = 0; i < high; i++)
            C[j * rows + i] = anew ? sum[j * high + i] : C[j * rows + i] - sum[j * high + i];
}

#define PATCHES(wide) \
    for (long i = lower ? j / LANE : 0; i < rows;) { \
        long left = rows - i; \
        lane *to = C + j * rows + i; \
        const double *by = b + j * across; \
        if (HIGH > 2 && (left == 3 || left > 4)) { \
            patch(to, A + i, by, count, rows, down, across, HIGH, wide, anew); \
            i += HIGH; \
        } else if (HIGH > 2 && left > 1) { \
            patch(to, A + i, by, count, rows, down, across, HIGH - 1, wide, anew); \
            i += HIGH - 1; \
        } else { \
            patch(to, A + i, by, count, rows, down, across, 1, wide, anew); \
            i++; \
        } \
    }

INLINE void patches(lane *C, const lane *A, const double *b, long count, long rows, long columns,
                    long down, long across, const int lower, const int anew)
{
    long j = 0;
    for (; j + WIDE <= columns; j += WIDE) PATCHES(WIDE)
    for (; j + 4 <= columns; j += 4) PATCHES(4)
    for (; j < columns; j++) PATCHES(1)
}

/* C -= A B, A of `count` columns, C of `columns`. */
static void subtract(lane *C, const lane *A, const double *b, long count, long rows, long columns,
                     long down, long across)
{
    patches(C, A, b, count, rows, columns, down, across, 0, 0);
}

/* The same of a symmetric C, from its diagonal on. */
static void subtract_lower(lane *C, const lane *A, const double *b, long n, long rows, long down,
                           long across)
{
    patches(C, A, b, n, rows, n, down, across, 1, 0);
}

static void assign(lane *C, const lane *A, const double *b, long count, long rows, long columns,
                   long down, long across)
{
    patches(C, A, b, count, rows, columns, down, across, 0, 1);
}

/* C = A M' and C = A M for a lower triangle M. */
static void times_upper(lane *C, const lane *A, const double *M, long n, long rows)
{
    for (long j = 0; j < n; j += WIDE) {
        long wide = n - j < WIDE ? n - j : WIDE;
        assign(C + j * rows, A, M + j, j + wide, rows, wide, rows * LANE, 1);
    }
}

static void times_lower(lane *C, const lane *A, const double *M, long n, long rows)
{
    for (long j = 0; j < n; j += WIDE) {
        long wide = n - j < WIDE ? n - j : WIDE;
        assign(C + j * rows, A + j * rows, M + j * (rows * LANE + 1), n - j, rows, wide, 1, rows * LANE);
    }
}

/* The inverse M of the factor of a symmetric tile, of which the lower triangle is given and destroyed. */
static int inverse_factor(lane *tile, lane *M, long n, long rows)
{
    long ld = rows * LANE;
    double inverse[n];
    for (long first = 0; first < n; first += WIDE) {
        long end = first + WIDE < n ? first + WIDE : n;
        subtract(tile + first * rows, tile, (double *)tile + first, first, rows, end - first, ld, 1);
        for (long j = first; j < end; j++) {
            lane *column = tile + j * rows;
            double *entry = (double *)column;
            if (!(entry[j] > 0))
                return 0;
            inverse[j] = 1 / sqrt(entry[j]);
            for (long i = j / LANE; i < rows; i++)
                column[i] = column[i] * inverse[j];
            for (long c = j + 1; c < end; c++)
                for (long i = c / LANE; i < rows; i++)
                    tile[c * rows + i] -= column[i] * entry[c];
        }
    }
    /* M L = I, from the last column back. */
    memset(M, 0, n * rows * sizeof(lane));
    const double *L = (double *)tile;
    for (long end = n; end > 0; end -= WIDE) {
        long first = end > WIDE ? end - WIDE : 0;
        subtract(M + first * rows, M + end * rows, L + first * ld + end, n - end, rows, end - first, 1, ld);
        for (long j = end - 1; j >= first; j--) {
            ((double *)M)[j * ld + j] += 1;
            for (long c = j + 1; c < end; c++)
                for (long i = c / LANE; i < rows; i++)
                    M[j * rows + i] -= M[c * rows + i] * L[j * ld + c];
            for (long i = j / LANE; i < rows; i++)
                M[j * rows + i] = M[j * rows + i] * inverse[j];
        }
    }
    return 1;
}

static void transposed(double *to, const double *from, long n, long ld)
{
    for (long first = 0; first < n; first += 8)
        for (long i = 0; i < n; i++)
            for (long j = first; j < n && j < first + 8; j++)
                to[i * ld + j] = from[j * ld + i];
}

typedef struct {
    long n, order, scalars, frames, entries, rows, ld, tile;
    const int *pairs;
    const double *values, *weights, *turns, *differences, *extra;
    const unsigned char *held;
} system_of;

static system_of told(const long *sizes, void **given)
{
    system_of s = {sizes[0], sizes[1], sizes[2], sizes[3], sizes[4]};
    s.rows = (s.n + LANE - 1) / LANE;
    s.ld = s.rows * LANE;
    s.tile = s.n * s.rows;
    s.pairs = given[0];
    s.values = given[1];
    s.weights = given[2];
    s.turns = given[3];
    s.differences = given[4];
    s.extra = given[5];
    s.held = given[6];
    return s;
}

/* Blocks between frames stand at their places in the window, counted round. */
INLINE lane *between(const system_of *s, lane *state, long one, long other)
{
    long a = one % (s->order + 1), b = other % (s->order + 1);
    return state + (a > b ? a * (a + 1) / 2 + b : b * (b + 1) / 2 + a) * s->tile;
}

/* J'J of the differences that begin at a frame; rows and columns of held freedoms are left out. */
static void add_prior(const system_of *s, lane *state, long frame)
{
    long windows = s->frames - s->order, balls = (s->n - s->scalars) / 3;
    const double *weight = s->weights + frame * s->n;
    for (long later = 0; later <= s->order; later++)
        for (long earlier = 0; earlier <= later; earlier++) {
            double *to = (double *)between(s, state, frame + later, frame + earlier);
            double both = s->differences[later] * s->differences[earlier];
            const unsigned char *row = s->held + (frame + later) * s->n;
            const unsigned char *column = s->held + (frame + earlier) * s->n;
            for (long d = 0; d < s->scalars; d++)
                if (!row[d] && !column[d])
                    to[d * s->ld + d] += both * weight[d];
            for (long b = 0; b < balls; b++) {
                const double *one = s->turns + ((later * windows + frame) * balls + b) * 9;
                const double *other = s->turns + ((earlier * windows + frame) * balls + b) * 9;
                long first = s->scalars + 3 * b;
                for (long i = 0; i < 3; i++)
                    for (long j = 0; j < (later == earlier ? i + 1 : 3); j++)
                        if (!row[first + i] && !column[first + j])
                            for (long m = 0; m < 3; m++)
                                to[(first + j) * s->ld + first + i] +=
                                    one[3 * m + i] * weight[first + m] * other[3 * m + j];
            }
        }
}

static void add_own(const system_of *s, double *to, long frame)
{
    const unsigned char *held = s->held + frame * s->n;
    const double *value = s->values + frame * s->entries;
    for (long e = 0; e < s->entries; e++) {
        long row = s->pairs[2 * e], column = s->pairs[2 * e + 1];
        if (!held[row] && !held[column])
            to[column * s->ld + row] += value[e];
    }
    for (long d = 0; d < s->n; d++) {
        if (held[d])
            to[d * s->ld + d] = 1;
        else if (s->extra)
            to[d * s->ld + d] += s->extra[frame * s->n + d];
    }
}

/* y += X x, and x += X' y. */
INLINE void add_product(const system_of *s, const lane *X, const double *x, double *y)
{
    lane found[s->rows];
    assign(found, X, x, s->n, s->rows, 1, 1, 0);
    for (long i = 0; i < s->n; i++)
        y[i] += ((double *)found)[i];
}

INLINE void add_transposed(const system_of *s, const lane *X, const double *y, double *x)
{
    lane from[s->rows];
    memset(from, 0, sizeof from);
    memcpy(from, y, s->n * sizeof(double));
    for (long j = 0; j < s->n; j++) {
        lane sum = all(0.0);
        for (long i = 0; i < s->rows; i++)
            sum += X[j * s->rows + i] * from[i];
        for (long l = 0; l < LANE; l++)
            x[j] += ((double *)&sum)[l];
    }
}

/* Eliminate the frames from start to stop. state: the blocks of the frames after, as those before left
   them. factors: for each frame M = L^-1 and the L_next of the frames after, n columns each. rhs, unless null,
   (frames, n): becomes L^-1 rhs as far as it goes. Gives the frame that is not positive definite, or -1. */
int trial_eliminate(const long *sizes, void **given, long start, long stop, lane *state,
                    lane *factors, double *rhs)
{
    system_of s = told(sizes, given);
    for (long k = start; k < stop; k++) {
        lane *M = factors + (k - start) * (s.order + 1) * s.tile;
        long after = s.frames - 1 - k < s.order ? s.frames - 1 - k : s.order;
        for (long j = 0; j <= s.order; j++)
            memset(between(&s, state, k + s.order, k + j), 0, s.tile * sizeof(lane));
        if (k + s.order < s.frames)
            add_prior(&s, state, k);
        lane *here = between(&s, state, k, k);
        add_own(&s, (double *)here, k);
        if (!inverse_factor(here, M, s.n, s.rows))
            return k;
        for (long a = 1; a <= after; a++)
            times_upper(M + a * s.tile, between(&s, state, k + a, k), (double *)M, s.n, s.rows);
        for (long a = 1; a <= after; a++) {
            const lane *X = M + a * s.tile;
            for (long b = 1; b < a; b++)
                subtract(between(&s, state, k + a, k + b), X, (double *)(M + b * s.tile), s.n, s.rows, s.n,
                         s.ld, 1);
            subtract_lower(between(&s, state, k + a, k + a), X, (double *)X, s.n, s.rows, s.ld, 1);
        }
        if (!rhs)
            continue;
        double *y = rhs + k * s.n, own[s.n];
        memset(own, 0, sizeof own);
        add_product(&s, M, y, own);
        for (long i = 0; i < s.n; i++) {
            y[i] = own[i];
            own[i] = -own[i];
        }
        for (long a = 1; a <= after; a++)
            add_product(&s, M + a * s.tile, own, y + a * s.n);
    }
    return -1;
}

/* x of L' x = rhs, in its place, for the frames from stop back to start. */
void trial_substitute(const long *sizes, void **given, long start, long stop, const lane *factors,
                      double *rhs)
{
    system_of s = told(sizes, given);
    for (long k = stop - 1; k >= start; k--) {
        const lane *M = factors + (k - start) * (s.order + 1) * s.tile;
        long after = s.frames - 1 - k < s.order ? s.frames - 1 - k : s.order;
        double *x = rhs + k * s.n, own[s.n];
        memset(own, 0, sizeof own);
        for (long a = 1; a <= after; a++)
            add_transposed(&s, M + a * s.tile, x + a * s.n, own);
        for (long i = 0; i < s.n; i++) {
            own[i] = x[i] - own[i];
            x[i] = 0;
        }
        add_transposed(&s, M, own, x);
    }
}

/* Blocks of the inverse, from the frame before stop back to start: with Z = L_next M,
   S_next,k = -S_next Z and S_k = M' M + Z' S_next Z. state: the blocks between the `reach` frames after;
   work: 2 order + 1 tiles. wanted: pairs of freedoms, with their scale. formula: (2, frames, reach + 1)
   weights of the frames from begin on, for which the variance of a sum is asked. found: of each frame, and
   of the two sums, (frames, pairs). */
void trial_covariances(const long *sizes, void **given, long start, long stop, const lane *factors,
                       lane *state, lane *work, long reach, long count, const int *wanted,
                       const double *scale, const long *begin, const double *formula, double **found)
{
    system_of s = told(sizes, given);
    long slots = reach + 1, n = s.n;
    lane *Z = work, *Zt = work + s.order * s.tile, *Mt = work + 2 * s.order * s.tile;
    #define PAIR(a, b) (state + (((k + (a)) % slots) * slots + (k + (b)) % slots) * s.tile)
    for (long k = stop - 1; k >= start; k--) {
        const lane *M = factors + (k - start) * (s.order + 1) * s.tile;
        long after = s.frames - 1 - k, within = after < s.order ? after : s.order;
        transposed((double *)Mt, (double *)M, n, s.ld);
        for (long b = 0; b < within; b++) {
            times_lower(Z + b * s.tile, M + (b + 1) * s.tile, (double *)M, n, s.rows);
            transposed((double *)(Zt + b * s.tile), (double *)(Z + b * s.tile), n, s.ld);
        }
        lane *here = PAIR(0, 0);
        times_lower(here, Mt, (double *)M, n, s.rows);
        for (long a = 1; a <= reach; a++) {
            lane *down = PAIR(a, 0), *across = PAIR(0, a);
            memset(down, 0, s.tile * sizeof(lane));
            if (a > after) {
                memset(across, 0, s.tile * sizeof(lane));
                continue;
            }
            for (long b = 1; b <= within; b++)
                subtract(down, PAIR(a, b), (double *)(Z + (b - 1) * s.tile), n, s.rows, n, 1, s.ld);
            transposed((double *)across, (double *)down, n, s.ld);
            if (a <= within)
                subtract_lower(here, Zt + (a - 1) * s.tile, (double *)down, n, s.rows, 1, s.ld);
        }
        for (long j = 0; j < n; j++)
            for (long i = 0; i < j; i++)
                ((double *)here)[j * s.ld + i] = ((double *)here)[i * s.ld + j];
        for (long e = 0; e < count; e++)
            found[0][k * count + e] = scale[e] * ((double *)here)[wanted[2 * e + 1] * s.ld + wanted[2 * e]];
        for (long r = k; r <= k + reach && r < s.frames; r++)
            for (long sum = 0; sum < 2 && begin[r] == k; sum++) {
                const double *w = formula + (sum * s.frames + r) * slots;
                double *to = found[1 + sum] + r * count;
                memset(to, 0, count * sizeof(double));
                for (long a = 0; a < slots && a <= after; a++)
                    for (long b = 0; b < slots && b <= after; b++) {
                        const double *block = (double *)PAIR(a, b);
                        for (long e = 0; e < count; e++)
                            to[e] += w[a] * w[b] * scale[e] * block[wanted[2 * e + 1] * s.ld + wanted[2 * e]];
                    }
            }
    }
}

/* y += M x for matrices told by their entries. */
void packed_times(long frames, long n, long entries, const long long *pairs, const double *values,
                  const double *x, double *y)
{
    for (long f = 0; f < frames; f++, values += entries, x += n, y += n)
        for (long e = 0; e < entries; e++) {
            long row = pairs[2 * e], column = pairs[2 * e + 1];
            y[row] += values[e] * x[column];
            if (row != column)
                y[column] += values[e] * x[row];
        }
}
"""

"""The C source of the damped step within bounds, the second half of the compiled kernel.

A vector holds the same entry of several problems; where they part (active sets, exact second
derivative or not), every vector goes through the same operations and a mask keeps what counts.
"""

from __future__ import annotations

STEP_SOURCE = """
typedef struct {
    long n, entries, stored;
    const int *starts, *later, *targets, *places, *order;
} plan;

INLINE lane set(const double *from, const long *frame, long stride, long place)
{
    lane x;
    for (int l = 0; l < LANE; l++)
        ((double *)&x)[l] = from[frame[l] * stride + place];
    return x;
}

/* An entry of packed matrices; one that elimination makes anew begins as zero. */
INLINE lane entry(const double *from, const long *frame, long stored, long place)
{
    return place < 0 ? all(0.0) : set(from, frame, stored, place);
}

INLINE int any(mask c)
{
    long long found = 0;
    for (int l = 0; l < LANE; l++)
        found |= ((const long long *)&c)[l];
    return found != 0;
}

/* M becomes L and D (diagonal first, then the entries of each turn), b the solution of M x = b. */
static void solve(const plan *p, lane *restrict M, lane *restrict b)
{
    const int *target = p->targets;
    for (long k = 0; k < p->n; k++) {
        lane inverse = all(1.0) / M[k];
        lane *column = M + p->n;
        for (long a = p->starts[k]; a < p->starts[k + 1]; a++) {
            lane part = column[a] * inverse;
            b[p->later[a]] -= part * b[k];
            for (long c = p->starts[k]; c <= a; c++)
                M[*target++] -= part * column[c];
        }
        for (long a = p->starts[k]; a < p->starts[k + 1]; a++)
            column[a] *= inverse;
        b[k] *= inverse;
    }
    for (long k = p->n - 1; k >= 0; k--)
        for (long a = p->starts[k]; a < p->starts[k + 1]; a++)
            b[k] -= M[p->n + a] * b[p->later[a]];
}

/* y = M x */
static void multiply(const plan *p, const lane *restrict M, const lane *restrict x, lane *restrict y)
{
    for (long k = 0; k < p->n; k++)
        y[k] = M[k] * x[k];
    for (long k = 0; k < p->n; k++)
        for (long a = p->starts[k]; a < p->starts[k + 1]; a++) {
            y[k] += M[p->n + a] * x[p->later[a]];
            y[p->later[a]] += M[p->n + a] * x[k];
        }
}

/* H made the exact second derivative in the problems that are late, where that is positive definite. */
static void second_order(const plan *p, lane *restrict H, lane *restrict exact, lane *restrict unit,
                         lane *restrict scale, const double *bend, const long *bent, const mask late,
                         double least)
{
    long n = p->n, all_entries = p->n + p->entries;
    for (long e = 0; e < all_entries; e++)
        exact[e] = H[e] - entry(bend, bent, p->stored, p->places[e]);
    for (long k = 0; k < n; k++) {
        mask moves = truth(H[k] > all(0.0));
        for (int l = 0; l < LANE; l++)
            ((double *)scale)[k * LANE + l] = 1.0 / sqrt(((double *)H)[k * LANE + l]);
        scale[k] = either(moves, scale[k], all(0.0));
        unit[k] = exact[k] * scale[k] * scale[k] + either(moves, all(0.0), all(1.0)) - all(least);
    }
    for (long k = 0; k < n; k++)
        for (long a = p->starts[k]; a < p->starts[k + 1]; a++)
            unit[n + a] = exact[n + a] * scale[k] * scale[p->later[a]];
    /* As many positive pivots as positive eigenvalues (Sylvester's law of inertia). */
    for (long k = 0; k < n; k++)
        scale[k] = all(0.0);
    solve(p, unit, scale);
    mask definite = late;
    for (long k = 0; k < n; k++)
        definite &= truth(unit[k] > all(0.0));
    for (long e = 0; e < all_entries; e++)
        H[e] = either(definite, exact[e], H[e]);
}

void damped_steps(long n, long entries, long stored, long most, long frames, lane *work, const int *starts,
                  const int *later, const int *targets, const int *places, const int *order,
                  const double *H, const double *bend, const double *damping, const double *g,
                  const double *low, const double *high, const long long *late,
                  const long long *guess, double *step, long long *active, double *gain,
                  const double *limits)
{
    const plan p = {n, entries, stored, starts, later, targets, places, order};
    long all_entries = n + entries;
    lane *model = work, *damped = model + all_entries, *M = damped + all_entries;
    lane *force = M + all_entries, *lo = force + n, *hi = lo + n, *held = hi + n, *at = held + n;
    lane *x = at + n, *y = x + n, *found = y + n, *changed = found + n;
    for (long start = 0; start < frames; start += LANE) {
        long frame[LANE], bent[LANE];
        mask is_late = {0};
        lane most_diagonal = all(1e-300), share = all(0.0);
        for (int l = 0; l < LANE; l++) {
            frame[l] = start + l < frames ? start + l : frames - 1;
            bent[l] = late[frame[l]] < 0 ? 0 : late[frame[l]];
            ((long long *)&is_late)[l] = late[frame[l]] < 0 ? 0 : -1;
            ((double *)&share)[l] = damping[frame[l]] + limits[0];
        }
        for (long e = 0; e < all_entries; e++)
            model[e] = entry(H, frame, stored, places[e]);
        for (long k = 0; k < n; k++) {
            most_diagonal = either(truth(model[k] > most_diagonal), model[k], most_diagonal);
            changed[k] = model[k];
            force[k] = set(g, frame, n, order[k]);
            lo[k] = set(low, frame, n, order[k]);
            hi[k] = set(high, frame, n, order[k]);
            for (int l = 0; l < LANE; l++)
                ((double *)held)[k * LANE + l] = guess[frame[l] * n + order[k]];
        }
        if (any(is_late))
            second_order(&p, model, damped, M, x, bend, bent, is_late, limits[2]);
        memcpy(damped, model, all_entries * sizeof(lane));
        for (long k = 0; k < n; k++) {
            lane floor = most_diagonal * all(limits[1]);
            damped[k] += share * either(truth(changed[k] > floor), changed[k], floor);
            found[k] = all(0.0);
        }
        mask todo = truth(all(0.0) == all(0.0));
        for (long sweep = 0; sweep < most && any(todo); sweep++) {
            for (long k = 0; k < n; k++)
                at[k] = either(truth(held[k] < all(0.0)), lo[k],
                               either(truth(held[k] > all(0.0)), hi[k], all(0.0)));
            multiply(&p, damped, at, y);
            for (long k = 0; k < n; k++) {
                mask free = truth(held[k] == all(0.0));
                x[k] = either(free, force[k] - y[k], all(0.0));
                M[k] = either(free, damped[k], all(1.0));
                for (long a = starts[k]; a < starts[k + 1]; a++)
                    M[n + a] = either(free & truth(held[later[a]] == all(0.0)), damped[n + a],
                                      all(0.0));
            }
            solve(&p, M, x);
            for (long k = 0; k < n; k++)
                x[k] += at[k];
            multiply(&p, damped, x, y);
            mask again = {0};
            for (long k = 0; k < n; k++) {
                lane outside = either(truth(x[k] < lo[k]), all(-1.0),
                                      either(truth(x[k] > hi[k]), all(1.0), all(0.0)));
                mask stays = truth((force[k] - y[k]) * held[k] > all(0.0)) | truth(lo[k] >= hi[k]);
                lane kept = either(stays, held[k], all(0.0));
                lane next = either(truth(held[k] == all(0.0)), outside, kept);
                again |= truth(next != held[k]);
                found[k] = either(todo, x[k], found[k]);
                held[k] = either(todo, next, held[k]);
            }
            todo &= again;
        }
        for (long k = 0; k < n; k++) {
            found[k] = either(truth(found[k] < lo[k]), lo[k], found[k]);
            found[k] = either(truth(found[k] > hi[k]), hi[k], found[k]);
        }
        multiply(&p, model, found, y);
        lane gained = all(0.0);
        for (long k = 0; k < n; k++)
            gained += found[k] * (force[k] - all(0.5) * y[k]);
        for (int l = 0; l < LANE && start + l < frames; l++) {
            gain[start + l] = ((double *)&gained)[l];
            for (long k = 0; k < n; k++) {
                step[(start + l) * n + order[k]] = ((double *)found)[k * LANE + l];
                active[(start + l) * n + order[k]] = (long long)((double *)held)[k * LANE + l];
            }
        }
    }
}
"""

"""The C source of the compiled kernel: one small library that serves every model.

It carries out a table of instructions (see `lane_program`) on blocks of frames, a vector of frames
at a time. Measured on the whole-body model: one straight-line C function for each model takes 4 to
10 s to compile and 1.5 to 2.1 microseconds a frame; this library compiles in a fraction of a second,
once, and takes about as long a frame, so nobody ever waits for a compiler.
"""

from __future__ import annotations

from decimal import Decimal
from math import factorial, pi

from condyle.solver.lane_program import JOINED_OPERATIONS, LANE_OPERATIONS, NUMBER_OPERATIONS
from condyle.solver.matrix_source import MATRIX_SOURCE
from condyle.solver.series_source import SERIES_SOURCE
from condyle.solver.step_source import STEP_SOURCE
from condyle.solver.trial_source import TRIAL_SOURCE

LANE = 8
"""Frames in one vector: the widest registers there are hold 8 doubles; narrower ones take turns."""
BLOCK = 64
"""Frames in one block: long enough to pay for reading an instruction, short enough for the cache."""

ROUND = 1.5 * 2.0**52
"""Added to a number and taken off again, leaves the nearest whole one."""
MODERATE = 2.0**18
"""rad; multiples of pi/2 up to here are told exactly by the three parts."""


def _split_half_pi() -> tuple[float, float, float]:
    """pi/2 in three parts, the first two of 33 bits so that their multiples are exact."""
    # 40 digits of pi, OEIS A000796.
    left = Decimal("3.1415926535897932384626433832795028841972") / 2
    parts = []
    for bits in (32, 66):
        part = int(left * 2**bits) / 2.0**bits
        parts.append(part)
        left -= Decimal(part)
    return parts[0], parts[1], float(left)


def _series(degree: int) -> str:
    """The Taylor series of the cosine (even degree), or of the sine over r (odd), in s = r r."""
    first = degree % 2
    text = repr((-1.0) ** (degree // 2) / factorial(degree))
    text = f"all({text})"
    for power in range(degree - 2, first - 1, -2):
        text = f"(all({(-1.0) ** (power // 2) / factorial(power)!r}) + s * {text})"
    return text


HALF_PI = _split_half_pi()
_HEAD = f"""
#include <math.h>
#include <string.h>
#if defined(__GNUC__) && !defined(CONDYLE_SCALAR)
#define LANE {LANE}
typedef double lane __attribute__((vector_size(8 * LANE)));
typedef long long mask __attribute__((vector_size(8 * LANE)));
#define INLINE static inline __attribute__((always_inline))
INLINE lane all(double x) {{ return (lane){{0}} + x; }}
INLINE mask truth(mask c) {{ return c; }}
INLINE lane either(mask c, lane x, lane y) {{ return (lane)(((mask)x & c) | ((mask)y & ~c)); }}
INLINE mask bits(lane x) {{ return (mask)x; }}
#else
#define LANE 1
typedef double lane;
typedef long long mask;
#define INLINE static inline
INLINE lane all(double x) {{ return x; }}
INLINE mask truth(mask c) {{ return -c; }}
INLINE lane either(mask c, lane x, lane y) {{ return c ? x : y; }}
INLINE mask bits(lane x) {{ mask m; memcpy(&m, &x, 8); return m; }}
#endif
#define BLOCK {BLOCK}
"""

_SINE = f"""
/* Sine and cosine of a vector: the nearest multiple of pi/2 is taken off in three parts (Cody and
   Waite 1980, Software Manual for the Elementary Functions), what is left goes into the Taylor series. */
INLINE int moderate(lane x)
{{
    const double *v = (const double *)&x;
    int good = 1;
    for (int l = 0; l < LANE; l++)
        good &= fabs(v[l]) < {MODERATE!r};
    return good;
}}

INLINE lane turn(lane x, mask ahead)
{{
    lane whole = x * all({2 / pi!r}) + all({ROUND!r});
    mask quarter = bits(whole) + ahead;
    lane k = whole - all({ROUND!r});
    lane r = x - k * all({HALF_PI[0]!r}) - k * all({HALF_PI[1]!r}) - k * all({HALF_PI[2]!r});
    lane s = r * r;
    lane even = {_series(16)};
    lane odd = r * ({_series(17)});
    lane found = either(truth((quarter & 1) == 0), odd, even);
    return either(truth((quarter & 2) == 0), found, -found);
}}

#define TURN(name, ahead, library) INLINE lane name(lane x) {{ \\
    if (moderate(x)) return turn(x, (mask){{0}} + ahead); \\
    for (int l = 0; l < LANE; l++) ((double *)&x)[l] = library(((double *)&x)[l]); \\
    return x; }}
TURN(sine, 0, sin)
TURN(cosine, 1, cos)
"""

_MACHINE = """
#define LANES(code, expression) case code: for (int k = 0; k < width; k++) { \\
    lane x = a[k], y = b[k], z = c[k]; (void)x; (void)y; (void)z; t[k] = expression; } break;
#define NUMBERS(code, expression) case code: for (int k = 0; k < width * LANE; k++) { \\
    double x = ((const double *)a)[k], y = ((const double *)b)[k]; (void)y; \\
    ((double *)t)[k] = expression; } break;

INLINE void carry_out(const int *restrict table, long count, lane *restrict work, const int width)
{
    for (const int *end = table + 5 * count; table < end; table += 5) {
        lane *t = work + (long)table[1] * (BLOCK / LANE);
        const lane *a = work + (long)table[2] * (BLOCK / LANE);
        const lane *b = work + (long)table[3] * (BLOCK / LANE);
        const lane *c = work + (long)table[4] * (BLOCK / LANE);
        switch (table[0]) {
            %s
        }
    }
}

/* Frames from `start`, the last one repeated where there are no more, into rows of the work space. */
static void take_in(double *work, const double *from, long size, long start, long frames, int block)
{
    for (int l = 0; l < block; l += 8)
        for (long i = 0; i < size; i++)
            for (int m = l; m < l + 8; m++) {
                long frame = start + m < frames ? start + m : frames - 1;
                work[i * BLOCK + m] = from[frame * size + i];
            }
}

static void give_out(double *to, const double *work, long size, long start, long frames, int block)
{
    long left = frames - start < block ? frames - start : block;
    for (int l = 0; l < left; l += 8)
        for (long i = 0; i < size; i++)
            for (int m = l; m < l + 8 && m < left; m++)
                to[(start + m) * size + i] = work[i * BLOCK + m];
}

/* places: row and size of each input that changes by frame, then of each output. */
void over_frames(const int *table, long count, double *work, long inputs, const double **in,
                 long outputs, double **out, const long *places, long frames)
{
    const long *to = places + 2 * inputs;
    for (long start = 0; start < frames;) {
        int block = frames - start > 2 * 8 ? BLOCK : 8;
        for (long i = 0; i < inputs; i++)
            take_in(work + places[2 * i] * BLOCK, in[i], places[2 * i + 1], start, frames, block);
        if (block == BLOCK)
            carry_out(table, count, (lane *)work, BLOCK / LANE);
        else
            carry_out(table, count, (lane *)work, 8 / LANE);
        for (long i = 0; i < outputs; i++)
            give_out(out[i], work + to[2 * i] * BLOCK, to[2 * i + 1], start, frames, block);
        start += block;
    }
}
"""


def kernel_source() -> str:
    """The C source, with the operations that CasADi of this version numbers as it does."""
    lanes = (LANE_OPERATIONS | JOINED_OPERATIONS).items()
    cases = [f"LANES({code}, {_in_lanes(text)})" for code, text in lanes]
    cases += [f"NUMBERS({code}, {text})" for code, text in NUMBER_OPERATIONS.items()]
    machine = _MACHINE % "\n            ".join(cases)
    parts = (_HEAD, _SINE, machine, STEP_SOURCE, MATRIX_SOURCE, TRIAL_SOURCE, SERIES_SOURCE)
    return "".join(parts)


def _in_lanes(expression: str) -> str:
    return expression.replace("1.0", "all(1.0)")

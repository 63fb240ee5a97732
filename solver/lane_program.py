"""A CasADi SX function as a table of instructions, which the compiled kernel and numpy carry out.

A row of the work space holds one number for every frame of a block. Constants, inputs and outputs
have rows of their own, so nothing is copied within a block; a product that is used once is joined
with the sum that uses it; rows are given out again as soon as their value has been used.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import casadi as ca
import numpy as np
from numpy.typing import NDArray

LANE_OPERATIONS = {
    ca.OP_ASSIGN: "x",
    ca.OP_ADD: "x + y",
    ca.OP_SUB: "x - y",
    ca.OP_MUL: "x * y",
    ca.OP_DIV: "x / y",
    ca.OP_NEG: "-x",
    ca.OP_SQ: "x * x",
    ca.OP_TWICE: "x + x",
    ca.OP_INV: "1.0 / x",
    ca.OP_SIN: "sine(x)",
    ca.OP_COS: "cosine(x)",
}
"""CasADi operation -> C expression of x and y; these are carried out on whole vectors of frames."""
NUMBER_OPERATIONS = {
    ca.OP_TAN: "tan(x)",
    ca.OP_ASIN: "asin(x)",
    ca.OP_ACOS: "acos(x)",
    ca.OP_ATAN: "atan(x)",
    ca.OP_EXP: "exp(x)",
    ca.OP_LOG: "log(x)",
    ca.OP_SQRT: "sqrt(x)",
    ca.OP_FABS: "fabs(x)",
    ca.OP_SIGN: "x < 0 ? -1.0 : x > 0 ? 1.0 : x",
    ca.OP_NOT: "x == 0",
    ca.OP_POW: "pow(x, y)",
    ca.OP_CONSTPOW: "pow(x, y)",
    ca.OP_FMIN: "fmin(x, y)",
    ca.OP_FMAX: "fmax(x, y)",
    ca.OP_ATAN2: "atan2(x, y)",
    ca.OP_LT: "x < y",
    ca.OP_LE: "x <= y",
    ca.OP_EQ: "x == y",
    ca.OP_NE: "x != y",
    ca.OP_AND: "x != 0 && y != 0",
    ca.OP_OR: "x != 0 || y != 0",
    ca.OP_IF_ELSE_ZERO: "x != 0 ? y : 0.0",
}
"""The same for what is carried out number by number."""
PRODUCT_PLUS, PRODUCT_MINUS, MINUS_PRODUCT = (
    max([*LANE_OPERATIONS, *NUMBER_OPERATIONS]) + i for i in (1, 2, 3)
)
JOINED_OPERATIONS = {
    PRODUCT_PLUS: "x * y + z",
    PRODUCT_MINUS: "x * y - z",
    MINUS_PRODUCT: "z - x * y",
}


@dataclass(frozen=True, slots=True)
class LaneProgram:
    """What to carry out, and where its numbers stand.

    Attributes
    ----------
    instructions : (instructions, 5) int32
        Operation, row of the result, rows of up to three operands.
    constants : (constants,)
        In the first rows.
    first_input, first_output : row of the first number of each input and output
    input_sizes, output_sizes : how many numbers each has
    rows : int
        Of the work space.
    """

    instructions: NDArray[np.int32]
    constants: NDArray[np.float64]
    first_input: tuple[int, ...]
    first_output: tuple[int, ...]
    input_sizes: tuple[int, ...]
    output_sizes: tuple[int, ...]
    rows: int


@dataclass(slots=True)
class _Values:
    """An SX function with every value given a number of its own, leaves (constants, inputs) first.

    `nodes` are operations on earlier values, `outputs` the value of each output number.
    """

    constants: list[float]
    leaves: int
    nodes: list[tuple[int, tuple[int, ...]]]
    outputs: list[int]


def lane_program(function: Any, *, join: bool) -> LaneProgram:
    """The program of an SX function with dense inputs and outputs.

    Parameters
    ----------
    join : bool
        Whether products that are used once are carried out by the sum that uses them.

    Raises
    ------
    NotImplementedError
        For an operation that no joint needs so far.
    """
    sizes_in = tuple(function.numel_in(i) for i in range(function.n_in()))
    sizes_out = tuple(function.numel_out(i) for i in range(function.n_out()))
    values = _values(function, sizes_in, sizes_out)
    if join:
        values = _joined(values)
    first_input = _starts(len(values.constants), sizes_in)
    first_output = _starts(values.leaves, sizes_out)
    instructions, rows = _placed(values)
    return LaneProgram(
        np.array(instructions, dtype=np.int32).reshape(-1, 5),
        np.array(values.constants, dtype=np.float64),
        first_input,
        first_output,
        sizes_in,
        sizes_out,
        rows,
    )


def _starts(first: int, sizes: tuple[int, ...]) -> tuple[int, ...]:
    return tuple(first + sum(sizes[:i]) for i in range(len(sizes)))


def _values(function: Any, sizes_in: tuple[int, ...], sizes_out: tuple[int, ...]) -> _Values:
    raw = [
        (function.instruction_id(k), function.instruction_input(k), function.instruction_output(k))
        for k in range(function.n_instructions())
    ]
    constants: dict[float, int] = {}
    for k, (op, _, _) in enumerate(raw):
        if op == ca.OP_CONST:
            constants.setdefault(function.instruction_constant(k), len(constants))
    first_input, first_output = _starts(len(constants), sizes_in), _starts(0, sizes_out)
    leaves = len(constants) + sum(sizes_in)
    nodes: list[tuple[int, tuple[int, ...]]] = []
    outputs = [-1] * sum(sizes_out)
    held: dict[int, int] = {}
    for k, (op, inputs, target) in enumerate(raw):
        if op == ca.OP_CONST:
            held[target[0]] = constants[function.instruction_constant(k)]
        elif op == ca.OP_INPUT:
            held[target[0]] = first_input[inputs[0]] + inputs[1]
        elif op == ca.OP_OUTPUT:
            outputs[first_output[target[0]] + target[1]] = held[inputs[0]]
        elif op in LANE_OPERATIONS or op in NUMBER_OPERATIONS:
            nodes.append((op, tuple(held[i] for i in inputs)))
            held[target[0]] = leaves + len(nodes) - 1
        else:
            raise NotImplementedError(f"no counterpart for CasADi operation {op}")
    return _Values(list(constants), leaves, nodes, outputs)


def _joined(values: _Values) -> _Values:
    """The same with products that are used once carried out by the sum that uses them."""
    uses = np.zeros(values.leaves + len(values.nodes), dtype=np.int64)
    for _, operands in values.nodes:
        for value in operands:
            uses[value] += 1
    for value in values.outputs:
        uses[value] += 1
    factors = {
        values.leaves + i: operands * (2 if op == ca.OP_SQ else 1)
        for i, (op, operands) in enumerate(values.nodes)
        if op in (ca.OP_MUL, ca.OP_SQ) and uses[values.leaves + i] == 1
    }
    nodes = list(values.nodes)
    absorbed: set[int] = set()
    for i, (op, operands) in enumerate(values.nodes):
        if op not in (ca.OP_ADD, ca.OP_SUB):
            continue
        first, second = operands
        if second in factors:
            joined = PRODUCT_PLUS if op == ca.OP_ADD else MINUS_PRODUCT
            nodes[i] = (joined, (*factors[second], first))
            absorbed.add(second)
        elif first in factors:
            joined = PRODUCT_PLUS if op == ca.OP_ADD else PRODUCT_MINUS
            nodes[i] = (joined, (*factors[first], second))
            absorbed.add(first)
    return _without(_Values(values.constants, values.leaves, nodes, values.outputs), absorbed)


def _without(values: _Values, absorbed: set[int]) -> _Values:
    """The values numbered anew without some nodes."""
    number = list(range(values.leaves))
    kept: list[tuple[int, tuple[int, ...]]] = []
    for i, (op, operands) in enumerate(values.nodes):
        number.append(values.leaves + len(kept))
        if values.leaves + i not in absorbed:
            kept.append((op, tuple(number[value] for value in operands)))
    outputs = [number[value] for value in values.outputs]
    return _Values(values.constants, values.leaves, kept, outputs)


def _placed(values: _Values) -> tuple[list[tuple[int, ...]], int]:
    """Instructions with a row for every value, and how many rows there are."""
    row = {value: value for value in range(values.leaves)}
    for i, value in enumerate(values.outputs):
        row.setdefault(value, values.leaves + i)
    last = {value: i for i, (_, operands) in enumerate(values.nodes) for value in operands}
    kept = set(row)
    fresh = _counted_from(values.leaves + len(values.outputs))
    free: list[int] = []
    rows = values.leaves + len(values.outputs)
    instructions = []
    for i, (op, operands) in enumerate(values.nodes):
        value = values.leaves + i
        for old in set(operands) - kept:
            if last[old] == i:
                free.append(row[old])
        if value not in row:
            row[value] = free.pop() if free else next(fresh)
        rows = max(rows, row[value] + 1)
        padded = [row[v] for v in operands] + [row[operands[0]]] * (3 - len(operands))
        instructions.append((op, row[value], *padded))
    for i, value in enumerate(values.outputs):
        target = values.leaves + i
        if row[value] != target:
            instructions.append((ca.OP_ASSIGN, target, row[value], row[value], row[value]))
    return instructions, rows


def _counted_from(first: int) -> Iterator[int]:
    while True:
        yield first
        first += 1

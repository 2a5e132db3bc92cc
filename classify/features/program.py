"""Trees of pixel-by-pixel operations, compiled to one list of steps and run over pieces that fit the processor's cache.

Plain array arithmetic sends every intermediate result through main memory. Here a few thousand pixels go through the
whole list before the next few thousand, so only the bands and the results do; what trees share is computed once.
Operations are element by element and always see contiguous pieces, so results do not depend on how a scene is cut.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

Layer = NDArray[np.float32]
_Operand = Layer | np.float32

# Pixels in a piece: 64 kB of float32, so that a dozen pieces stay in a second-level cache.
PIECE_PX = 16_384


@dataclass(frozen=True, slots=True)
class Number:
    """A constant."""

    value: float


@dataclass(frozen=True, slots=True)
class Name:
    """A layer by name. position: where it stands in the formula, in characters from 0; it does not tell names apart."""

    name: str
    position: int = field(default=0, compare=False)


@dataclass(frozen=True, slots=True)
class Call:
    """An operation of `OPERATIONS` on the values of other nodes."""

    operation: str
    arguments: tuple[Node, ...]


@dataclass(frozen=True, slots=True)
class Weighted:
    """offset + the sum of weight * layer, added up in the order given. names and weights are of equal length."""

    names: tuple[str, ...]
    weights: tuple[float, ...]
    offset: float = 0.0


Node = Number | Name | Call | Weighted

_ZERO, _ONE = np.float32(0), np.float32(1)


def _clean(x: Layer) -> None:
    """Make infinities NaN, in place: infinity times zero is NaN, and adding zero changes nothing else."""
    x += x * _ZERO


def _keep_nan(out: Layer, *values: _Operand) -> None:
    for value in values:
        out += value * _ZERO


def _ufunc(function: np.ufunc) -> Callable[..., None]:
    def run(out: Layer, *values: _Operand) -> None:
        function(*values, out=out)

    return run


def _chain(function: np.ufunc) -> Callable[..., None]:
    def run(out: Layer, *values: _Operand) -> None:
        function(values[0], values[1], out=out)
        for value in values[2:]:
            function(out, value, out=out)

    return run


def _condition(function: np.ufunc) -> Callable[..., None]:
    def run(out: Layer, *values: _Operand) -> None:
        function(*values, out=out)  # true and false are stored as 1 and 0
        _keep_nan(out, *values)

    return run


def _mean(out: Layer, *values: _Operand) -> None:
    _chain(np.add)(out, *values)
    np.divide(out, np.float32(len(values)), out=out)


def _where(out: Layer, condition: _Operand, yes: _Operand, no: _Operand) -> None:
    np.copyto(out, no)
    np.copyto(out, yes, where=condition != 0)
    _keep_nan(out, condition)


def _power(out: Layer, base: _Operand, exponent: _Operand) -> None:
    if np.ndim(exponent) == 0 and exponent == 2:
        np.multiply(base, base, out=out)
    else:
        np.power(base, exponent, out=out)
        _keep_nan(out, base, exponent)  # 1 ^ NaN and NaN ^ 0 would be 1


@dataclass(frozen=True, slots=True)
class _Operation:
    """run: writes the result to its first argument. An operation that `hides` infinity would turn infinite input into
    a finite number; one that `makes` it may give infinity for finite input."""

    run: Callable[..., None]
    hides: bool = True
    makes: bool = False


OPERATIONS: Mapping[str, _Operation] = {
    "add": _Operation(_ufunc(np.add), hides=False, makes=True),
    "subtract": _Operation(_ufunc(np.subtract), hides=False, makes=True),
    "multiply": _Operation(_ufunc(np.multiply), hides=False, makes=True),
    "divide": _Operation(_ufunc(np.divide), makes=True),
    "power": _Operation(_power, makes=True),
    "negative": _Operation(_ufunc(np.negative), hides=False),
    "less": _Operation(_condition(np.less)),
    "less_equal": _Operation(_condition(np.less_equal)),
    "greater": _Operation(_condition(np.greater)),
    "greater_equal": _Operation(_condition(np.greater_equal)),
    "equal": _Operation(_condition(np.equal)),
    "not_equal": _Operation(_condition(np.not_equal)),
    "and": _Operation(_condition(np.logical_and)),
    "or": _Operation(_condition(np.logical_or)),
    "not": _Operation(_condition(np.logical_not)),
    "where": _Operation(_where),
    "min": _Operation(_chain(np.minimum)),
    "max": _Operation(_chain(np.maximum)),
    "mean": _Operation(_mean, hides=False, makes=True),
    "abs": _Operation(_ufunc(np.absolute), hides=False),
    "sign": _Operation(_ufunc(np.sign)),
    "sqrt": _Operation(_ufunc(np.sqrt), hides=False),
    "cbrt": _Operation(_ufunc(np.cbrt), hides=False),
    "log": _Operation(_ufunc(np.log), makes=True),
    "log10": _Operation(_ufunc(np.log10), makes=True),
    "exp": _Operation(_ufunc(np.exp), makes=True),
    "sin": _Operation(_ufunc(np.sin)),
    "cos": _Operation(_ufunc(np.cos)),
    "tan": _Operation(_ufunc(np.tan), makes=True),
    "asin": _Operation(_ufunc(np.arcsin)),
    "acos": _Operation(_ufunc(np.arccos)),
    "atan": _Operation(_ufunc(np.arctan)),
    "atan2": _Operation(_ufunc(np.arctan2)),
}


@dataclass(frozen=True, slots=True)
class _Step:
    """One operation: the node, the registers it reads, the one it writes, and whether infinities may be in it."""

    node: Call | Weighted
    reads: tuple[int, ...]
    writes: int
    clean: bool


@dataclass(frozen=True, slots=True)
class Program:
    """Steps that turn layers into one result per wanted name.

    inputs: names of the layers read. constants: values of further registers. results: register of each result.
    Registers are numbered inputs first, then constants, then one for each result (a row of the output itself), then
    `buffers` that steps share whose values are not needed at the same time.
    """

    inputs: tuple[str, ...]
    constants: tuple[float, ...]
    steps: tuple[_Step, ...]
    results: tuple[int, ...]
    buffers: int

    @classmethod
    def compile(
        cls, definitions: Mapping[str, Node], wanted: Sequence[str], replaced: Mapping[str, Node] = MappingProxyType({})
    ) -> Program:
        """The program that computes the names `wanted`: names of `definitions`, or of layers that are passed through.

        A definition may use the names of those before it. A layer that is `replaced` is so everywhere, by a node over
        layers as they are read. Equal parts of definitions are computed once.
        """
        values = _Values()
        known = {name: values.number(node, {}) for name, node in replaced.items()}
        for name, node in definitions.items():
            known[name] = values.number(node, known)
        results = [known[name] if name in known else values.number(Name(name), known) for name in wanted]
        return _allocate(values, results)

    def run(self, layers: Mapping[str, Layer], out: NDArray[np.float32], crop_px: int = 0) -> None:
        """Compute every root over `layers` (float32, h x w each, or any one shape) into `out` (roots, h', w').

        `crop_px` rows and columns at each edge of the layers are left out. No warning is given for invalid values.
        """
        arrays = [np.asarray(layers[name], dtype=np.float32) for name in self.inputs]
        flat = out.reshape(len(self.results), -1)
        with np.errstate(all="ignore"):
            for start, pieces in _pieces(arrays, out.shape[1:], crop_px):
                size = pieces[0].size if pieces else flat.shape[1]
                self._run_piece(pieces, flat[:, start : start + size])

    def _run_piece(self, pieces: list[Layer], out: NDArray[np.float32]) -> None:
        buffers = np.empty((self.buffers, out.shape[1]), dtype=np.float32)
        registers: list[_Operand] = [*pieces, *map(np.float32, self.constants), *out, *buffers]
        for step in self.steps:
            target = registers[step.writes]
            assert isinstance(target, np.ndarray), step
            values = [registers[index] for index in step.reads]
            if isinstance(step.node, Weighted):
                _weigh(target, step.node, values)
            else:
                OPERATIONS[step.node.operation].run(target, *values)
            if step.clean:
                _clean(target)
        own = len(pieces) + len(self.constants)
        for root, register in enumerate(self.results):
            if register != own + root:
                out[root] = registers[register]


def _weigh(out: Layer, node: Weighted, values: Sequence[_Operand]) -> None:
    out[...] = np.float32(node.offset)
    for value, weight in zip(values, node.weights, strict=True):
        out += value * np.float32(weight)


def _pieces(arrays: list[Layer], shape: tuple[int, ...], crop_px: int) -> Iterator[tuple[int, list[Layer]]]:
    """Contiguous one-dimensional pieces of all arrays, with the number of pixels before them."""
    total = int(np.prod(shape))
    if not arrays:
        yield 0, []
    elif crop_px == 0 and all(array.shape == shape and array.flags.c_contiguous for array in arrays):
        for start in range(0, total, PIECE_PX):
            yield start, [array.reshape(-1)[start : start + PIECE_PX] for array in arrays]
    else:
        whole = [np.broadcast_to(array, array.shape) for array in arrays]
        if crop_px:
            whole = [array[crop_px:-crop_px, crop_px:-crop_px] for array in whole]
        whole = [np.broadcast_to(array, shape).reshape(shape[0] if shape else 1, -1) for array in whole]
        rows = max(1, PIECE_PX // max(1, whole[0].shape[1]))
        for row in range(0, whole[0].shape[0], rows):
            yield (
                row * whole[0].shape[1],
                [np.ascontiguousarray(array[row : row + rows]).reshape(-1) for array in whole],
            )


@dataclass(frozen=True, slots=True)
class _Value:
    """One distinct value: its node, the numbers of the values it is made of, and whether it may hold infinities."""

    node: Node
    parts: tuple[int, ...]
    infinite: bool


class _Values:
    """Numbers the distinct values of trees, parts before wholes; equal operations on equal parts are one value."""

    def __init__(self) -> None:
        self.values: list[_Value] = []
        self.must_clean: set[int] = set()
        self._numbers: dict[Hashable, int] = {}

    def number(self, node: Node, known: Mapping[str, int]) -> int:
        """The number of a node's value. `known` are the names that stand for values numbered before."""
        match node:
            case Name(name):
                return known[name] if name in known else self._add(("name", name), node, (), False)
            case Number(value):
                return self._add(("number", value), node, (), False)
            case Weighted(names, weights, offset):
                parts = tuple(self.number(Name(name), known) for name in names)
                self.need_finite(parts)
                return self._add(("weighted", weights, offset, parts), node, parts, True)
            case Call(name, arguments):
                parts = tuple(self.number(argument, known) for argument in arguments)
                operation = OPERATIONS[name]
                if operation.hides:
                    self.need_finite(parts)
                inherits = not operation.hides and any(self.values[part].infinite for part in parts)
                return self._add((name, parts), node, parts, operation.makes or inherits)

    def _add(self, key: Hashable, node: Node, parts: tuple[int, ...], infinite: bool) -> int:
        if key not in self._numbers:
            self._numbers[key] = len(self.values)
            self.values.append(_Value(node, parts, infinite))
        return self._numbers[key]

    def need_finite(self, numbers: Iterable[int]) -> None:
        """Infinities are to be made NaN in these values."""
        self.must_clean.update(number for number in numbers if self.values[number].infinite)


def _allocate(values: _Values, results: Sequence[int]) -> Program:
    """Hand out registers by how long each value is needed."""
    values.need_finite(results)
    used = _reachable(values, results)
    names = {n: node.name for n in used if isinstance(node := values.values[n].node, Name)}
    numbers = {n: node.value for n in used if isinstance(node := values.values[n].node, Number)}
    register = {number: place for place, number in enumerate([*names, *numbers])}
    for place, number in enumerate(results, start=len(register)):
        register.setdefault(number, place)
    top = first_buffer = len(names) + len(numbers) + len(results)
    work = [n for n in used if n not in names and n not in numbers]
    last_use = {part: number for number in work for part in values.values[number].parts}
    free: list[int] = []
    steps: list[_Step] = []
    for number in work:
        value = values.values[number]
        assert isinstance(value.node, Call | Weighted), value
        reads = tuple(register[part] for part in value.parts)
        if number not in register:
            if not free:
                free.append(top)
                top += 1
            register[number] = free.pop()
        steps.append(_Step(value.node, reads, register[number], number in values.must_clean))
        # Only now may the parts' buffers be used again: no step writes where it still reads.
        done = {part for part in value.parts if last_use[part] == number}
        free.extend(sorted(register[part] for part in done if register[part] >= first_buffer))
    places = tuple(register[number] for number in results)
    return Program(tuple(names.values()), tuple(numbers.values()), tuple(steps), places, top - first_buffer)


def _reachable(values: _Values, results: Sequence[int]) -> list[int]:
    """Numbers of the values that the results are made of, in order."""
    found, stack = set(results), list(results)
    while stack:
        new = set(values.values[stack.pop()].parts) - found
        found |= new
        stack.extend(new)
    return sorted(found)

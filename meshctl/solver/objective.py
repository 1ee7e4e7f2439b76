"""What is to be made small, each with its derivative by hand: value and cotangent of a matrix.

All take matrices [wavelength, out, in] and give the value and its cotangent G of that shape, with
d value = Re sum conj(G) dM. Demands without a wavelength axis hold at every wavelength.
Public: Objective, MatrixError, PowerError, DarkOutputs, Mask, Combined, OwnWish, state_preparation, objective_of,
smooth_worst.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np

from meshctl.errors import NotFinite, WrongSize, WrongUsage
from meshctl.optics.measures import FREE_PHASES, with_free_phases
from meshctl.solver.target import Target

WORST_POWER = 16  # of the mean that stands for the maximum: at 20 wavelengths it lies within 17 % below it
OVER = ("mean", "worst")
FLOOR = 1e-15  # power below which a logarithm of it would mean nothing: -150 dB


class Objective(Protocol):
    """Anything that can be refined for."""

    @property
    def wavelengths_nm(self) -> np.ndarray | None:
        """Wavelengths (W,) at which the matrix is wanted; None: the centre wavelength alone."""

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        """Value, and cotangent [W, out, in], for a matrix [W, out, in]."""

    def matrix_error(self, matrix: np.ndarray) -> float:
        """E of a matrix [W, out, in], root mean square over wavelengths; NaN where no matrix is wanted."""


def smooth_worst(values: np.ndarray) -> tuple[float, np.ndarray]:
    """A smooth stand-in for the largest of non-negative numbers, and its derivative by each.

    The mean of power WORST_POWER: never above the largest, never below it over W^(1 / WORST_POWER).
    """
    largest = float(values.max())
    if largest == 0.0:
        return 0.0, np.full(len(values), 1.0 / len(values))
    share = values / largest
    mean = float(np.mean(share**WORST_POWER))
    value = mean ** (1.0 / WORST_POWER)
    return largest * value, share ** (WORST_POWER - 1) * (value / mean / len(values))


def _joined(values: np.ndarray, cotangents: np.ndarray, over: str) -> tuple[float, np.ndarray]:
    if len(values) == 1:
        return float(values[0]), cotangents
    if over == "mean":
        return float(values.mean()), cotangents / len(values)
    value, by_each = smooth_worst(values)
    return value, cotangents * by_each[:, None, None]


def _stack(array: np.ndarray, name: str, shape: tuple[int, ...] | None = None) -> np.ndarray:
    """An array as [W or 1, out, in]."""
    stack = np.asarray(array)
    stack = stack[None] if stack.ndim == 2 else stack
    if stack.ndim != 3:
        raise WrongSize(f"{name} has {stack.ndim} axes", remedy="give (out, in) or (wavelengths, out, in)")
    if shape is not None and (stack.shape[1:] != shape[1:] or 1 < len(stack) != shape[0] > 1):
        raise WrongSize(f"{name} has shape {stack.shape}; it belongs to {shape}", remedy="give both the same shape")
    return stack


def _check_weight(weight: np.ndarray) -> None:
    bad = np.argwhere(~(np.isfinite(weight) & (weight >= 0.0)))
    if len(bad):
        w, row, column = bad[0]
        raise NotFinite(
            f"weight in row {row + 1} column {column + 1} is {weight[w, row, column]:g}",
            remedy="give numbers from 0; 0 is an entry that does not matter",
        )
    if not weight.reshape(len(weight), -1).any(1).all():
        raise WrongUsage("all weights are 0, so nothing is asked for", remedy="give some entry a weight above 0")


def _check_word(name: str, word: str, allowed: Sequence[str]) -> None:
    if word not in allowed:
        raise WrongUsage(f"{name} is '{word}'", remedy=f"use one of: {', '.join(allowed)}")


def _check_waves(wavelengths_nm: np.ndarray | None, rows: int) -> None:
    if rows > 1 and (wavelengths_nm is None or len(wavelengths_nm) != rows):
        given = "none" if wavelengths_nm is None else len(wavelengths_nm)
        raise WrongSize(
            f"demands are given for {rows} wavelengths, wavelengths for {given}", remedy="give one demand for each"
        )


@dataclass(frozen=True, eq=False)
class MatrixError:
    """E^2 = 1 - F: the squared distance to a matrix up to a complex scale, over what counts.

    Parameters
    ----------
    target : complex (out, in) or (W, out, in)
    weight : float of that shape, or None
        Of each entry's squared distance; 0 is an entry that does not matter.
    free : which port phases do not count: nothing, outputs, inputs, both
    over : "mean" of the wavelengths or "worst"
    wavelengths_nm : float (W,), or None

    The scale, and the phases that do not count, are the best ones of each wavelength.
    """

    target: np.ndarray
    weight: np.ndarray | None = None
    free: str = "nothing"
    over: str = "mean"
    wavelengths_nm: np.ndarray | None = None

    def __post_init__(self) -> None:
        target = _stack(self.target, "the target")
        object.__setattr__(self, "target", target)
        _check_word("free", self.free, FREE_PHASES)
        _check_word("over", self.over, OVER)
        _check_waves(self.wavelengths_nm, len(target))
        if self.weight is not None:
            weight = _stack(self.weight, "the weight", target.shape)
            _check_weight(weight)
            object.__setattr__(self, "weight", weight)
        wanted = target if self.weight is None else self.weight * target
        if not np.abs(wanted).reshape(len(wanted), -1).any(1).all():
            raise WrongUsage(
                "the target is 0 wherever it has a weight", remedy="ask for dark outputs where nothing else is wanted"
            )

    def _one(self, matrix: np.ndarray, target: np.ndarray, weight: np.ndarray | None) -> tuple[float, np.ndarray]:
        weighted = target if weight is None else weight * target
        turned, turn = matrix, None
        if self.free != "nothing":
            # the phases that bring conj(target) * matrix to its largest sum
            turn = with_free_phases(np.ones(matrix.shape, complex), np.conj(np.conj(weighted) * matrix), self.free)
            turned = matrix * turn
        light = float(np.vdot(turned, turned if weight is None else weight * turned).real)
        norm = float(np.vdot(target, weighted).real)
        if light == 0.0:
            return 1.0, np.zeros_like(matrix)
        scale = np.vdot(turned, weighted) / light
        # from the residual and not from 1 - F, so that small errors keep their digits
        residual = scale * turned - target
        if weight is None:
            value = float(np.vdot(residual, residual).real) / norm
        else:
            value = float(np.vdot(residual, weight * residual).real) / norm
            residual = weight * residual
        cotangent = residual * (2.0 * np.conj(scale) / norm)
        return value, cotangent if turn is None else cotangent * np.conj(turn)

    def _each(self, matrix: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        values, cotangents = np.empty(len(matrix)), np.empty(matrix.shape, complex)
        for w, m in enumerate(matrix):
            weight = None if self.weight is None else self.weight[min(w, len(self.weight) - 1)]
            values[w], cotangents[w] = self._one(m, self.target[min(w, len(self.target) - 1)], weight)
        return values, cotangents

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        values, cotangents = self._each(matrix)
        return _joined(values, cotangents, self.over)

    def matrix_error(self, matrix: np.ndarray) -> float:
        return math.sqrt(float(self._each(matrix)[0].mean()))


@dataclass(frozen=True, eq=False)
class PowerError:
    """Mean squared miss of the output powers, weighted, relative to the squared powers wanted.

    Parameters
    ----------
    power : float (out, in) or (W, out, in), share of each input's light wanted at each output
    weight : float of that shape, or None; 0 is an entry that does not matter
    over, wavelengths_nm : as for `MatrixError`
    """

    power: np.ndarray
    weight: np.ndarray | None = None
    over: str = "mean"
    wavelengths_nm: np.ndarray | None = None

    def __post_init__(self) -> None:
        power = _stack(self.power, "the power").astype(float)
        object.__setattr__(self, "power", power)
        _check_word("over", self.over, OVER)
        _check_waves(self.wavelengths_nm, len(power))
        weight = np.ones(power.shape) if self.weight is None else _stack(self.weight, "the weight", power.shape)
        _check_weight(weight)
        object.__setattr__(self, "weight", weight)

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        assert self.weight is not None
        miss = np.abs(matrix) ** 2 - self.power
        norm = (self.weight * self.power**2).sum((1, 2), keepdims=True)
        norm = np.where(norm > 0.0, norm, self.weight.sum((1, 2), keepdims=True))
        pull = self.weight * miss / norm
        return _joined((pull * miss).sum((1, 2)), 4.0 * pull * matrix, self.over)

    def matrix_error(self, matrix: np.ndarray) -> float:  # noqa: ARG002
        return math.nan


@dataclass(frozen=True, eq=False)
class DarkOutputs:
    """Share of the entering light that reaches outputs which are to stay dark, mean over the lit inputs.

    Parameters
    ----------
    outputs : positions of the dark outputs
    inputs : positions of the lit inputs, or None for all
    over, wavelengths_nm : as for `MatrixError`
    """

    outputs: Sequence[int]
    inputs: Sequence[int] | None = None
    over: str = "mean"
    wavelengths_nm: np.ndarray | None = None

    def __post_init__(self) -> None:
        _check_word("over", self.over, OVER)
        if not len(self.outputs) or (self.inputs is not None and not len(self.inputs)):
            raise WrongUsage("no output is to be dark, or no input lit", remedy="name at least one of each")

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        n_inputs = matrix.shape[2]
        rows, columns = np.array(self.outputs), np.arange(n_inputs) if self.inputs is None else np.array(self.inputs)
        _check_positions("output", rows, matrix.shape[1])
        _check_positions("input", columns, n_inputs)
        leak = matrix[:, rows[:, None], columns]
        cotangent = np.zeros_like(matrix)
        cotangent[:, rows[:, None], columns] = leak * (2.0 / len(columns))
        return _joined((np.abs(leak) ** 2).sum((1, 2)) / len(columns), cotangent, self.over)

    def matrix_error(self, matrix: np.ndarray) -> float:  # noqa: ARG002
        return math.nan


def _check_positions(name: str, positions: np.ndarray, count: int) -> None:
    outside = positions[(positions < 0) | (positions >= count)]
    if len(outside):
        raise WrongSize(f"there is no {name} at position {outside[0]}", remedy=f"give positions from 0 to {count - 1}")


@dataclass(frozen=True, eq=False)
class Mask:
    """How far powers in dB lie outside what a mask allows: mean square of the excess, dB^2; 0 is met.

    Parameters
    ----------
    least_db : float (W, out, in), pass bands: the power must not be lower; NaN: not asked
    most_db : float (W, out, in), stop bands: the power must not be higher; NaN: not asked
    wavelengths_nm : float (W,), or None with W = 1
    over : "mean" of the wavelengths or "worst"
    """

    least_db: np.ndarray
    most_db: np.ndarray
    wavelengths_nm: np.ndarray | None = None
    over: str = "mean"

    def __post_init__(self) -> None:
        least = _stack(self.least_db, "least_db").astype(float)
        most = _stack(self.most_db, "most_db", least.shape).astype(float)
        object.__setattr__(self, "least_db", least)
        object.__setattr__(self, "most_db", most)
        _check_word("over", self.over, OVER)
        _check_waves(self.wavelengths_nm, max(len(least), len(most)))
        if np.isnan(least).all() and np.isnan(most).all():
            raise WrongUsage("the mask asks for nothing", remedy="give a pass or a stop band")
        crossed = np.argwhere(least > most)
        if len(crossed):
            w, row, column = crossed[0]
            raise WrongUsage(
                f"output {row + 1} from input {column + 1} is to be above {least[w, row, column]:g} dB and below "
                f"{most[w, row, column]:g} dB",
                remedy="lower the pass band or raise the stop band",
            )

    def excess_db(self, matrix: np.ndarray) -> np.ndarray:
        """How far each power lies outside, dB: negative below a pass band, positive above a stop band, 0 inside."""
        power_db = 10.0 * np.log10(np.abs(matrix) ** 2 + FLOOR)
        low, high = power_db - self.least_db, power_db - self.most_db
        outside: np.ndarray = np.where(low < 0.0, low, 0.0) + np.where(high > 0.0, high, 0.0)
        return outside

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        excess = self.excess_db(matrix)
        asked = np.broadcast_to(~(np.isnan(self.least_db) & np.isnan(self.most_db)), matrix.shape)
        count = np.maximum(asked.sum((1, 2)), 1)
        by_power_db = 2.0 * excess / count[:, None, None]
        cotangent = by_power_db * (20.0 / math.log(10.0)) * matrix / (np.abs(matrix) ** 2 + FLOOR)
        return _joined((excess**2).sum((1, 2)) / count, cotangent, self.over)

    def matrix_error(self, matrix: np.ndarray) -> float:  # noqa: ARG002
        return math.nan


@dataclass(frozen=True, eq=False)
class Combined:
    """A weighted sum of objectives at the same wavelengths."""

    parts: Sequence[tuple[float, Objective]]

    def __post_init__(self) -> None:
        if not self.parts:
            raise WrongUsage("nothing is combined", remedy="give at least one objective")
        first = self.wavelengths_nm
        for _, part in self.parts[1:]:
            waves = part.wavelengths_nm
            same = waves is None if first is None else waves is not None and np.array_equal(waves, first)
            if not same:
                raise WrongUsage("objectives at different wavelengths are combined", remedy="give all the same")

    @property
    def wavelengths_nm(self) -> np.ndarray | None:
        return self.parts[0][1].wavelengths_nm

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        value, cotangent = 0.0, np.zeros(matrix.shape, complex)
        for weight, part in self.parts:
            own, by_matrix = part.evaluate(matrix)
            value += weight * own
            cotangent += weight * by_matrix
        return value, cotangent

    def matrix_error(self, matrix: np.ndarray) -> float:
        """Of the first part that wants a matrix."""
        errors = [part.matrix_error(matrix) for _, part in self.parts]
        return next((e for e in errors if not math.isnan(e)), math.nan)


@dataclass(frozen=True, eq=False)
class OwnWish:
    """A wish of the user's own making: any real function of the matrix, written with jax.numpy.

    Parameters
    ----------
    function : takes a complex jax array (W, out, in), returns a real number that is to be small
    wavelengths_nm : float (W,), or None

    jax is loaded at the first evaluation and follows the function alone; the light goes through the kernels.

    Example
    -------
    >>> import jax.numpy as jnp
    >>> level = OwnWish(lambda m: jnp.var(jnp.abs(m) ** 2))
    >>> level.evaluate(np.ones((1, 2, 2), complex))[0]
    0.0
    """

    function: Callable[[Any], Any]
    wavelengths_nm: np.ndarray | None = None

    @cached_property
    def _value_and_grad(self) -> Callable[[Any], Any]:
        import jax

        compiled: Callable[[Any], Any] = jax.jit(jax.value_and_grad(self.function))
        return compiled

    def evaluate(self, matrix: np.ndarray) -> tuple[float, np.ndarray]:
        import jax

        with jax.enable_x64(True):
            value, gradient = self._value_and_grad(matrix)
            # jax gives d/dx - i d/dy of a real function
            return float(value), np.conj(np.asarray(gradient))

    def matrix_error(self, matrix: np.ndarray) -> float:  # noqa: ARG002
        return math.nan


def state_preparation(
    wanted: np.ndarray, lit_input: int, n_inputs: int, wavelengths_nm: np.ndarray | None = None, over: str = "mean"
) -> MatrixError:
    """One input to a wanted vector, up to a complex scale; light at other outputs counts as error.

    Parameters
    ----------
    wanted : complex (out,), fields at the outputs
    lit_input : position of the input
    n_inputs : inputs of the mesh; what light of the others does is not asked
    """
    _check_positions("input", np.array([lit_input]), n_inputs)
    target = np.zeros((len(wanted), n_inputs), complex)
    target[:, lit_input] = wanted
    weight = np.zeros(target.shape)
    weight[:, lit_input] = 1.0
    return MatrixError(target, weight, "nothing", over, wavelengths_nm)


def objective_of(target: Target) -> Objective:
    """What is to be made small for a target: 0 where all of it is met."""
    waves, over = target.wavelengths_nm, target.over
    parts: list[tuple[float, Objective]] = []
    if target.matrix is not None:
        parts.append((1.0, MatrixError(target.matrix, target.weight, target.free, over, waves)))
    if target.power is not None:
        parts.append((1.0, PowerError(target.power, target.weight, over, waves)))
    least, most = target.least_db, target.most_db
    if least is not None and most is not None and not (np.isnan(least) & np.isnan(most)).all():
        parts.append((1.0, Mask(least, most, waves, over)))
    if target.dark:
        lit = None
        if target.weight is not None:
            lit = np.flatnonzero(target.weight.reshape(-1, target.size[1]).any(0)).tolist()
        parts.append((1.0, DarkOutputs(target.dark, lit, over, waves)))
    return parts[0][1] if len(parts) == 1 else Combined(parts)

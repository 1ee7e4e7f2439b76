"""Light through any net, loops and reflections included.

Every part is a scattering matrix S over its ports, every link exchanges the waves of two ports. Unknown are
the waves on the links: with a the waves that enter ports, b = S a those that leave, a_p = b_mate(p). Parts
of one cell are joined first, then cells along nested halves of the net (`meshctl.optics.fronts`); what
remains at the end is the response between the external ports, [out, in].

Every part must be reciprocal (S symmetric), so the response is symmetric too. A loop that no light can enter
(a pivot of zero) holds none; such loops are counted in `dark_loops`.
Public: Scattered, Room, scatter, fields, vjp, jvp, kept_room; from `pattern`: WavePattern, compile_pattern.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from meshctl.errors import UnsoundNet, WrongSize
from meshctl.optics.fronts import Fronts
from meshctl.optics.joining import join, pull_back, substitute
from meshctl.optics.kernels import filled, float64, given, int64, kernel, void
from meshctl.optics.pattern import WavePattern, compile_pattern

SMALL_PRODUCT = 10_000_000  # multiplications
RECIPROCAL_WITHIN = 1e-9  # of a field amplitude: far above rounding, far below any measured part


class Room:
    """Memory for the fronts at W wavelengths; fresh pages cost more than the solve that fills them."""

    def __init__(self, n_waves: int, fronts: Fronts) -> None:
        self.fronts = fronts
        self._numbers = [np.empty((n_waves, n)) for n in (fronts.size, fronts.size, fronts.pivots, fronts.pivots)]
        self._slopes: np.ndarray | None = None
        self.turn = 0

    def fits(self, n_waves: int, fronts: Fronts) -> bool:
        return self.fronts is fronts and len(self._numbers[0]) == n_waves

    def at(self, wave: int) -> tuple[np.ndarray, ...]:
        """Fronts and pivots of one wavelength: real, imaginary, real, imaginary."""
        return tuple(numbers[wave] for numbers in self._numbers)

    def slopes(self) -> np.ndarray:
        """Zeros for the cotangents of one wavelength's fronts."""
        if self._slopes is None:
            self._slopes = np.empty((2, self.fronts.size))
        self._slopes.fill(0.0)
        return self._slopes


@dataclass(frozen=True, eq=False)
class Scattered:
    """What `scatter` found at W wavelengths."""

    pattern: WavePattern  # the one solved: narrowed to the external ports in use
    response: np.ndarray  # c128[W, out, in]
    residual: np.ndarray  # f64[W]: largest breach of a link by a mixture of all inputs, over its largest field
    dark_loops: np.ndarray  # i64[W], loops that no light enters
    inputs: np.ndarray  # i64, positions among pattern.external_ports
    outputs: np.ndarray
    s_values: np.ndarray = field(repr=False)  # c128[W, N]
    room: Room | None = field(default=None, repr=False)  # fronts at all wavelengths, with keep=True
    turn: int = 0  # which use of the room this is


def scatter(
    pattern: WavePattern,
    s_values: np.ndarray,
    inputs: Sequence[int] | np.ndarray | None = None,
    outputs: Sequence[int] | np.ndarray | None = None,
    *,
    keep: bool = False,
    reuse: Scattered | None = None,
) -> Scattered:
    """The response of a net between its external ports.

    Parameters
    ----------
    s_values : complex (W, N), the entries of the parts' S at every wavelength, in the pattern's order
    inputs, outputs : positions among the external ports; None: all
    keep : keep what `fields`, `vjp`, `jvp` and `Updater` need (16 bytes x `fronts.size` per wavelength)
    reuse : an earlier result of the same call with keep=True; its kept numbers are overwritten

    Returns
    -------
    Scattered

    Raises
    ------
    WrongSize, UnsoundNet
        UnsoundNet where a part is not reciprocal.

    Cost: per wavelength about n^1.5 of the number of cells: 0.06, 0.9, 22 ms for all ports of 30, 306, 2862
    hexagon cells, less for fewer ports (their first use compiles a narrowed pattern).
    Source: George 1973 (nested dissection); no pivoting is needed as Re(x* (I - P S) x) >= 0 for passive parts.
    """
    values = np.ascontiguousarray(s_values, np.complex128)
    if values.ndim != 2 or values.shape[1] != pattern.n_entries:
        raise WrongSize(f"S values have shape {values.shape}; this net takes (W, {pattern.n_entries})")
    _check_reciprocal(pattern, values)
    everything = np.arange(len(pattern.external_ports))
    inputs = everything if inputs is None else np.asarray(inputs, np.int64)
    outputs = everything if outputs is None else np.asarray(outputs, np.int64)
    used = np.union1d(inputs, outputs)
    pattern = pattern.narrowed(used)
    inputs, outputs = np.searchsorted(used, inputs), np.searchsorted(used, outputs)

    fronts, n, n_waves = pattern.fronts, len(used), len(values)
    room = reuse.room if reuse is not None else None
    if room is None or not room.fits(n_waves if keep else 1, fronts):
        room = Room(n_waves if keep else 1, fronts)
    room.turn += 1
    response = np.empty((n_waves, n, n), np.complex128)
    residual, dark = np.empty(n_waves), np.empty(n_waves, np.int64)
    re, im = np.ascontiguousarray(values.real), np.ascontiguousarray(values.imag)
    for w in range(n_waves):
        solved = room.at(w if keep else 0)
        dark[w] = join(fronts.table, fronts.children, fronts.maps, fronts.entries, re[w], im[w], *solved)
        response[w].real, response[w].imag = (part[fronts.size - n * n :].reshape(n, n) for part in solved[:2])
        residual[w] = _residual(pattern, re[w], im[w], solved, response[w])
    if len(inputs) < n or len(outputs) < n or (inputs != np.arange(n)).any() or (outputs != inputs).any():
        response = response[:, outputs[:, None], inputs]
    kept = (room, room.turn) if keep else (None, 0)
    return Scattered(pattern, response, residual, dark, inputs, outputs, values, *kept)


def _check_reciprocal(pattern: WavePattern, values: np.ndarray) -> None:
    apart = abs(values - values[:, pattern.mirror])
    if apart.size and not apart.max() <= RECIPROCAL_WITHIN:  # NaN counts as apart
        w, k = np.unravel_index(int(np.argmax(np.where(np.isnan(apart), np.inf, apart))), apart.shape)
        out, into = int(pattern.s_out_port[k]), int(pattern.s_in_port[k])
        element = int(np.searchsorted(pattern.port_start, out, side="right")) - 1
        first = int(pattern.port_start[element])
        raise UnsoundNet(
            f"element {element} is not reciprocal: S[{out - first}, {into - first}] is {values[w, k]:.6g}, its "
            f"reverse {values[w, pattern.mirror[k]]:.6g}; they may differ by {RECIPROCAL_WITHIN:g}",
            remedy="give the part a symmetric scattering matrix",
        )


@kernel(void(*[given(int64)] * 2, *[given(float64)] * 2, *[given(float64, 2)] * 2, *[filled(float64, 2)] * 2))
def _leave(s_out, s_in, s_re, s_im, a_re, a_im, b_re, b_im):  # type: ignore[no-untyped-def]
    """b += S a for waves [P, K]."""
    for e in range(len(s_out)):
        p, q, x_re, x_im = s_out[e], s_in[e], s_re[e], s_im[e]
        for c in range(a_re.shape[1]):
            b_re[p, c] += x_re * a_re[q, c] - x_im * a_im[q, c]
            b_im[p, c] += x_re * a_im[q, c] + x_im * a_re[q, c]


def _waves(
    pattern: WavePattern,
    re: np.ndarray,
    im: np.ndarray,
    solved: tuple[np.ndarray, ...],
    entering: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Waves [P, K] that enter and leave every port for fields entering the external ports [X, K]."""
    fronts = pattern.fronts
    a, b, y = (np.zeros((2, len(pattern.mate), entering.shape[1])) for _ in range(3))
    a[0, pattern.external_ports], a[1, pattern.external_ports] = entering.real, entering.imag
    substitute(fronts.table, fronts.ports, *solved, y[0], y[1], a[0], a[1], 0)
    _leave(pattern.s_out_port, pattern.s_in_port, re, im, a[0], a[1], b[0], b[1])
    return a[0] + 1j * a[1], b[0] + 1j * b[1]


def _residual(
    pattern: WavePattern,
    re: np.ndarray,
    im: np.ndarray,
    solved: tuple[np.ndarray, ...],
    response: np.ndarray,
) -> float:
    n = len(pattern.external_ports)
    mixture = np.exp(1j * 2.4 * np.arange(n) ** 2)[:, None]  # all inputs, none in phase with the next
    a, b = _waves(pattern, re, im, solved, mixture)
    linked = pattern.mate >= 0
    breach = abs(a[linked] - b[pattern.mate[linked]]).max(initial=0.0)
    through = np.einsum("ij,jk", response, mixture)  # not @: waking its threads can cost ten times the solve
    breach = max(breach, abs(through - b[pattern.external_ports]).max(initial=0.0))
    return float(breach / abs(a).max(initial=1.0))


def kept_room(solved: Scattered) -> Room:
    """The fronts of a solve that kept them and that no later one has overwritten."""
    if solved.room is None:
        raise ValueError("solve with keep=True first")
    if solved.room.turn != solved.turn:
        raise ValueError("what was kept has been overwritten by a later solve that reused it")
    return solved.room


def fields(solved: Scattered, entering: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Waves at every port for given fields at the inputs.

    Parameters
    ----------
    solved : Scattered, with keep=True
    entering : complex (in,) or (in, K)

    Returns
    -------
    entering, leaving : complex (W, P) or (W, P, K); zero at dark ports and, entering, at unused external ports

    Cost: K times a few operations per number in the fronts.
    """
    room, pattern = kept_room(solved), solved.pattern
    columns = np.asarray(entering, complex)
    if columns.shape[:1] != solved.inputs.shape:
        raise WrongSize(f"entering fields have {columns.shape[0]} rows; there are {len(solved.inputs)} inputs")
    flat = np.zeros((len(pattern.external_ports), columns[0].size), complex)
    flat[solved.inputs] = columns.reshape(len(columns), -1)
    values = solved.s_values
    runs = [
        _waves(
            pattern,
            np.ascontiguousarray(values[w].real),
            np.ascontiguousarray(values[w].imag),
            room.at(w),
            flat,
        )
        for w in range(len(values))
    ]
    shape = (len(values), len(pattern.mate), *columns.shape[1:])
    return np.array([a for a, _ in runs]).reshape(shape), np.array([b for _, b in runs]).reshape(shape)


def vjp(solved: Scattered, cotangent: np.ndarray) -> np.ndarray:
    """The derivative of a real objective by every entry of the parts' S.

    Parameters
    ----------
    solved : Scattered, with keep=True
    cotangent : complex (W, out, in), g in d objective = Re sum conj(g) dR; for objective = sum |R - T|^2
        it is 2 (R - T)

    Returns
    -------
    complex (W, N), G in d objective = Re sum conj(G) dS over all entries, for symmetric dS. An entry and its
    reverse share their part equally.

    Cost: about twice the joining itself, whatever the number of ports; no further solve.
    Source: reverse accumulation through the elimination (Griewank and Walther 2008, ch. 3); it equals the
    reciprocity form dR_ij = a(i)^T dS a(j), which `jvp` uses.
    """
    room, pattern = kept_room(solved), solved.pattern
    fronts, n = pattern.fronts, len(pattern.external_ports)
    shape = (len(solved.s_values), len(solved.outputs), len(solved.inputs))
    if cotangent.shape != shape:
        raise WrongSize(f"the cotangent has shape {cotangent.shape}; the response {shape}")
    seed = np.zeros((n, n), complex)
    gradient = np.empty(solved.s_values.shape, complex)
    for w in range(len(gradient)):
        seed[solved.outputs[:, None], solved.inputs] = cotangent[w].conj()
        g, pivot = room.slopes(), np.zeros((2, fronts.pivots))
        entry = np.zeros((2, pattern.n_entries))
        both = 0.5 * (seed + seed.T)
        g[0, fronts.size - n * n :], g[1, fronts.size - n * n :] = both.real.ravel(), both.imag.ravel()
        pull_back(
            fronts.table,
            fronts.children,
            fronts.maps,
            fronts.entries,
            *room.at(w),
            g[0],
            g[1],
            pivot[0],
            pivot[1],
            entry[0],
            entry[1],
            fronts.live,
        )
        gradient[w] = entry[0] - 1j * entry[1]
    return 0.5 * (gradient + gradient[:, pattern.mirror])


def jvp(solved: Scattered, s_change: np.ndarray) -> np.ndarray:
    """The change of the response for a small change of the parts' S, such as that with wavelength.

    Parameters
    ----------
    solved : Scattered, with keep=True
    s_change : complex (W, N), symmetric

    Returns
    -------
    complex (W, out, in): dR_ij = a(i)^T dS a(j), a(i) the waves for light that enters at output i.

    Cost: one substitution with as many columns as there are ports in use.
    """
    room, pattern = kept_room(solved), solved.pattern
    change = np.empty(solved.response.shape, complex)
    values, every = solved.s_values, np.eye(len(pattern.external_ports))
    for w in range(len(values)):
        re, im = np.ascontiguousarray(values[w].real), np.ascontiguousarray(values[w].imag)
        a, _ = _waves(pattern, re, im, room.at(w), every)
        b = np.zeros((2, *a.shape))
        d_re, d_im = np.ascontiguousarray(s_change[w].real), np.ascontiguousarray(s_change[w].imag)
        a_re, a_im = np.ascontiguousarray(a.real), np.ascontiguousarray(a.imag)
        _leave(pattern.s_out_port, pattern.s_in_port, d_re, d_im, a_re, a_im, b[0], b[1])
        left, right = a[:, solved.outputs].T, (b[0] + 1j * b[1])[:, solved.inputs]
        # a small product is done without waking the threads of @, which can cost ten times as much
        small = left.size * right.shape[1] < SMALL_PRODUCT
        change[w] = np.einsum("ij,jk", left, right) if small else left @ right
    return change


__all__ = ["Room", "Scattered", "WavePattern", "compile_pattern", "fields", "jvp", "kept_room", "scatter", "vjp"]

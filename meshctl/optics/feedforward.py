"""Light through a loop-free net: its light order, its 2x2 blocks, and the compiled propagation.

A net without loops is a list of lanes. Every part acts on one lane or on two; parts that follow one
another on the same two lanes are fused into one 2x2 block, and the blocks are applied in place to fields
kept as two real arrays (an interleaved complex kernel takes twice the time).
Public: Circuit, compile_circuit, fuse, propagate, BOTH, FIRST, SECOND.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.optics.kernels import filled, float64, given, int32, int64, kernel, sized_kernel, uint8, void

BOTH, FIRST, SECOND = 0, 1, 2  # lanes of its block that a part acts on


@dataclass(frozen=True, eq=False)
class Circuit:
    """A loop-free net compiled for the kernels; B blocks in light order, L lanes."""

    lane_a: np.ndarray  # i32[B]
    lane_b: np.ndarray  # i32[B], -1: a block of one lane
    first: np.ndarray  # i32[B + 1], where each block's parts start in `element`
    element: np.ndarray  # i32[E], in light order
    side: np.ndarray  # u8[E], BOTH, FIRST or SECOND lane of the block
    element_lane_a: np.ndarray  # i32[E], by element: its lane
    element_lane_b: np.ndarray  # i32[E], -1 for one-lane parts
    output_lane: np.ndarray  # i32[outputs]
    n_inputs: int  # input k enters lane k; dark lanes follow
    n_lanes: int

    @property
    def n_blocks(self) -> int:
        return len(self.lane_a)


@sized_kernel(int64(*[given(int32)] * 3, *[filled(int32)] * 5))
def _order(port_start, mate, owner, lane_of, waiting, queue, lane_a, lane_b):  # type: ignore[no-untyped-def]
    """Follow the light through elements whose entrances are all reached; returns how many were.

    lane_of[port] is preset for entrances that light or darkness enters; queue, lane_a, lane_b are filled.
    Elements are taken in index order where that is a light order, else as they become ready.
    """
    n = len(waiting)
    head, tail = 0, 0
    for e in range(n):
        if waiting[e] == 0:
            queue[tail] = e
            tail += 1
    while head < tail:
        e = queue[head]
        head += 1
        p = port_start[e]
        width = (port_start[e + 1] - p) // 2
        lane_a[e] = lane_of[p]
        lane_b[e] = lane_of[p + 1] if width == 2 else -1
        for k in range(width):
            out = p + width + k
            lane_of[out] = lane_of[p + k]
            q = mate[out]
            if q >= 0:
                lane_of[q] = lane_of[out]
                f = owner[q]
                waiting[f] -= 1
                if waiting[f] == 0:
                    queue[tail] = f
                    tail += 1
    return tail


@sized_kernel(int64(*[given(int32)] * 4, *[filled(int32)] * 5))
def _group(queue, lane_a, lane_b, cell_of, open_block, pending, block_of, block_a, block_b):  # type: ignore[no-untyped-def]
    """Assign every element to a block; returns the number of blocks.

    One-lane parts wait (linked list `pending`, one chain per lane) for the next two-lane part on their lane
    unless they belong to the cell whose block is open there.
    """
    n_lanes = len(open_block)
    last = np.full(n_lanes, -1, np.int32)
    cell_in = np.full(len(queue), -2, np.int32)
    blocks = 0
    for i in range(len(queue)):
        e = queue[i]
        a, b = lane_a[e], lane_b[e]
        if b < 0:
            o = open_block[a]
            if o >= 0 and cell_of[e] >= 0 and cell_in[o] == cell_of[e]:
                block_of[e] = o
            else:
                pending[e] = last[a]
                last[a] = e
                open_block[a] = -1
            continue
        o = open_block[a]
        if not (o >= 0 and o == open_block[b] and block_a[o] == a and block_b[o] == b):
            o = blocks
            blocks += 1
            block_a[o], block_b[o] = a, b
            cell_in[o] = cell_of[e]
            for lane in (a, b):
                f = last[lane]
                while f >= 0:
                    block_of[f] = o
                    f = pending[f]
                last[lane] = -1
                open_block[lane] = o
        block_of[e] = o
    for lane in range(n_lanes):
        f = last[lane]
        if f >= 0:
            o = blocks
            blocks += 1
            block_a[o], block_b[o] = lane, -1
            while f >= 0:
                block_of[f] = o
                f = pending[f]
    return blocks


def _is_light_order(mate: np.ndarray, owner: np.ndarray, entrance: np.ndarray) -> bool:
    """True if every linked entrance is fed by an element of lower index."""
    ports = np.flatnonzero(entrance & (mate >= 0))
    return bool((owner[mate[ports]] < owner[ports]).all())


def compile_circuit(
    port_start: np.ndarray,
    mate: np.ndarray,
    cell_of: np.ndarray,
    input_ports: np.ndarray,
    output_ports: np.ndarray,
) -> Circuit | None:
    """Compile a net whose parts have two or four ports and pass light from a to b.

    Parameters
    ----------
    port_start : int32 (E + 1,); mate : int32 (P,); cell_of : int32 (E,)
    input_ports, output_ports : int32, ports by position

    Returns
    -------
    Circuit, or None where the net has a loop or a link that runs against the light.
    """
    n_elements = len(port_start) - 1
    count = np.diff(port_start)
    if not np.isin(count, (2, 4)).all():
        return None
    owner = np.repeat(np.arange(n_elements, dtype=np.int32), count)
    entrance = (np.arange(len(mate)) - port_start[owner]) < (count // 2)[owner]
    linked = mate >= 0
    if (entrance[linked] == entrance[mate[linked]]).any():
        return None
    if not entrance[input_ports].all() or entrance[output_ports].any():
        return None
    lane_of = np.full(len(mate), -1, np.int32)
    lane_of[input_ports] = np.arange(len(input_ports))
    dark = np.flatnonzero(entrance & ~linked & (lane_of < 0))
    lane_of[dark] = len(input_ports) + np.arange(len(dark))
    n_lanes = len(input_ports) + len(dark)

    waiting = np.bincount(owner[entrance & linked], minlength=n_elements).astype(np.int32)
    queue, lane_a, lane_b = (np.full(n_elements, -1, np.int32) for _ in range(3))
    done = _order(n_elements, port_start, mate, owner, lane_of, waiting, queue, lane_a, lane_b)
    if done < n_elements:
        return None
    if _is_light_order(mate, owner, entrance):
        queue = np.arange(n_elements, dtype=np.int32)

    block_of, pending = np.empty(n_elements, np.int32), np.full(n_elements, -1, np.int32)
    block_a, block_b = np.empty(n_elements, np.int32), np.empty(n_elements, np.int32)
    open_block = np.full(n_lanes, -1, np.int32)
    n_blocks = _group(n_elements, queue, lane_a, lane_b, cell_of, open_block, pending, block_of, block_a, block_b)
    block_a, block_b = block_a[:n_blocks].copy(), block_b[:n_blocks].copy()

    element = queue[np.argsort(block_of[queue], kind="stable")]
    first = np.searchsorted(block_of[element], np.arange(n_blocks + 1)).astype(np.int32)
    block = block_of[element]
    side = np.where(lane_b[element] >= 0, BOTH, np.where(lane_a[element] == block_a[block], FIRST, SECOND))
    return Circuit(
        block_a,
        block_b,
        first,
        element,
        side.astype(np.uint8),
        lane_a,
        lane_b,
        lane_of[output_ports],
        len(input_ports),
        n_lanes,
    )


@kernel(void(given(int32), given(int32), given(uint8), given(float64, 2), filled(float64, 2)))
def fuse(first, element, side, parts, blocks):  # type: ignore[no-untyped-def]
    """Multiply the parts of every block.

    Parameters
    ----------
    parts : float64 (4, E): real, imaginary of the through amplitude, real, imaginary of the cross
    blocks : float64 (B, 8), filled: real, imaginary of 00, 01, 10, 11
    """
    for b in range(len(first) - 1):
        m00, m01, m10, m11 = 1.0 + 0j, 0j, 0j, 1.0 + 0j
        for i in range(first[b], first[b + 1]):
            e = element[i]
            t = complex(parts[0, e], parts[1, e])
            if side[i] == 0:
                x = complex(parts[2, e], parts[3, e])
                m00, m10 = t * m00 + x * m10, x * m00 + t * m10
                m01, m11 = t * m01 + x * m11, x * m01 + t * m11
            elif side[i] == 1:
                m00 *= t
                m01 *= t
            else:
                m10 *= t
                m11 *= t
        row = blocks[b]
        row[0], row[1], row[2], row[3] = m00.real, m00.imag, m01.real, m01.imag
        row[4], row[5], row[6], row[7] = m10.real, m10.imag, m11.real, m11.imag


@kernel(void(given(int32), given(int32), given(float64, 2), filled(float64, 2), filled(float64, 2)))
def propagate(lane_a, lane_b, blocks, real, imag):  # type: ignore[no-untyped-def]
    """Apply the blocks in light order to fields [L, columns], two real arrays, in place."""
    columns = real.shape[1]
    for b in range(len(lane_a)):
        ar, ai, br, bi = blocks[b, 0], blocks[b, 1], blocks[b, 2], blocks[b, 3]
        cr, ci, dr, di = blocks[b, 4], blocks[b, 5], blocks[b, 6], blocks[b, 7]
        m, n = lane_a[b], lane_b[b]
        # rows as views: the compiler then sees four separate arrays and vectorises (six times faster)
        x_real, x_imag = real[m], imag[m]
        if n >= 0:
            y_real, y_imag = real[n], imag[n]
            for q in range(columns):
                xr, xi, yr, yi = x_real[q], x_imag[q], y_real[q], y_imag[q]
                x_real[q] = ar * xr - ai * xi + br * yr - bi * yi
                x_imag[q] = ar * xi + ai * xr + br * yi + bi * yr
                y_real[q] = cr * xr - ci * xi + dr * yr - di * yi
                y_imag[q] = cr * xi + ci * xr + dr * yi + di * yr
        else:
            for q in range(columns):
                xr, xi = x_real[q], x_imag[q]
                x_real[q] = ar * xr - ai * xi
                x_imag[q] = ar * xi + ai * xr

"""Derivative of a loop-free net's matrix by every setting or part at once, for errors too small to re-solve for.

Public: jacobian_kernel.
"""

from __future__ import annotations

import numpy as np

from meshctl.optics.kernels import complex128, filled, float64, given, int32, int64, kernel, uint8, void


@kernel(
    void(
        given(int32),  # lane_a [B]
        given(int32),  # lane_b [B], -1 for one lane
        given(int32),  # first [B + 1]
        given(int32),  # element [E]
        given(uint8),  # side [E]
        given(float64, 2),  # parts [4, E]
        given(int32),  # setting_of [E]: the row of the jacobian that a part adds to, -1: none
        given(uint8),  # fades [E]: 1 where the derivative is by a loss in nepers, 0 by angle or phase
        given(int32),  # output_lane [out]
        int64,  # inputs
        int64,  # lanes
        filled(complex128, 3),  # jacobian [S, out, in], zero
    )
)
def jacobian_kernel(  # type: ignore[no-untyped-def]
    lane_a, lane_b, first, element, side, parts, setting_of, fades, output_lane, n_inputs, n_lanes, jacobian
):
    """Fill jacobian[s] = d matrix / d setting s, settings in rad at the centre wavelength.

    A part whose amplitudes turn as exp(i value), or as cos and i sin of it, has the derivative i times
    itself, through and cross exchanged for a coupler. By a loss it is minus itself.
    Cost: B (out + in) for the fields and out * in for every setting.
    """
    n_blocks, n_out = len(lane_a), len(output_lane)
    field = np.zeros((n_lanes, n_inputs), np.complex128)
    for k in range(n_inputs):
        field[k, k] = 1.0
    entering = np.empty((n_blocks, 2, n_inputs), np.complex128)
    whole = np.empty((n_blocks, 2, 2), np.complex128)
    for b in range(n_blocks):
        m, n = lane_a[b], max(lane_b[b], 0)
        two = lane_b[b] >= 0
        block = whole[b]
        block[0, 0], block[0, 1], block[1, 0], block[1, 1] = 1.0, 0.0, 0.0, 1.0
        for i in range(first[b], first[b + 1]):
            e = element[i]
            t, x = complex(parts[0, e], parts[1, e]), complex(parts[2, e], parts[3, e])
            for q in range(2):
                u, v = block[0, q], block[1, q]
                if side[i] == 0:
                    block[0, q], block[1, q] = t * u + x * v, x * u + t * v
                elif side[i] == 1:
                    block[0, q] = t * u
                else:
                    block[1, q] = t * v
        for q in range(n_inputs):
            u = field[m, q]
            v = field[n, q] if two else 0j
            entering[b, 0, q], entering[b, 1, q] = u, v
            field[m, q] = block[0, 0] * u + block[0, 1] * v
            if two:
                field[n, q] = block[1, 0] * u + block[1, 1] * v
    behind = np.zeros((n_lanes, n_out), np.complex128)
    for o in range(n_out):
        behind[output_lane[o], o] = 1.0
    left = np.empty((2, n_out), np.complex128)
    right = np.empty((2, n_inputs), np.complex128)
    for b in range(n_blocks - 1, -1, -1):
        m, n = lane_a[b], max(lane_b[b], 0)
        two = lane_b[b] >= 0
        # walk the block's parts from its exit: `left` is behind the part, `right` enters it
        left[0] = behind[m]
        left[1] = behind[n] if two else np.zeros(n_out, np.complex128)
        for i in range(first[b + 1] - 1, first[b] - 1, -1):
            e = element[i]
            t, x = complex(parts[0, e], parts[1, e]), complex(parts[2, e], parts[3, e])
            s = setting_of[e]
            if s >= 0:
                right[0], right[1] = entering[b, 0], entering[b, 1]
                for j in range(first[b], i):
                    f = element[j]
                    tj, xj = complex(parts[0, f], parts[1, f]), complex(parts[2, f], parts[3, f])
                    for q in range(n_inputs):
                        u, v = right[0, q], right[1, q]
                        if side[j] == 0:
                            right[0, q], right[1, q] = tj * u + xj * v, xj * u + tj * v
                        elif side[j] == 1:
                            right[0, q] = tj * u
                        else:
                            right[1, q] = tj * v
                row = jacobian[s]
                turned = 1j
                if fades[e] == 1:
                    turned = complex(-1.0, 0.0)
                    if side[i] == 0:
                        t, x = x, t
                for o in range(n_out):
                    if side[i] == 0:
                        a = turned * (left[0, o] * x + left[1, o] * t)
                        c = turned * (left[0, o] * t + left[1, o] * x)
                        for q in range(n_inputs):
                            row[o, q] += a * right[0, q] + c * right[1, q]
                    else:
                        lane = side[i] - 1
                        a = turned * left[lane, o] * t
                        for q in range(n_inputs):
                            row[o, q] += a * right[lane, q]
                if fades[e] == 1 and side[i] == 0:
                    t, x = x, t
            for o in range(n_out):
                u, v = left[0, o], left[1, o]
                if side[i] == 0:
                    left[0, o], left[1, o] = t * u + x * v, x * u + t * v
                elif side[i] == 1:
                    left[0, o] = t * u
                else:
                    left[1, o] = t * v
        behind[m] = left[0]
        if two:
            behind[n] = left[1]

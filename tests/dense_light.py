"""Light through any mesh apart from what the package makes of it: S of every part by its formula, joined by others.

Formulas: coupler [[cos k, i sin k], [i sin k, cos k]], phases exp(i p l0 / l), guides exp(2 pi i L (n(l)/l - n0/l0))
with n(l) = n_eff - (n_group - n_eff)(l - l0)/l0, losses 10^(-dB/20), reflecting parts [[r, t], [t, r]].
"""

import numpy as np

from meshctl.optics.elements import KINDS


def part_matrices(mesh, settings, wavelength_nm=None):
    """S of every element at one wavelength, as matrices over its ports in their order."""
    net, built = mesh.net, mesh.as_built
    l0 = net.wavelength_nm
    wave = wavelength_nm or l0
    index = net.n_eff - (net.n_group - net.n_eff) * (wave - l0) / l0
    parts = []
    for e, kind in enumerate(net.kind.tolist()):
        name, s = KINDS[kind].name, int(net.setting_of[e])
        value = (settings[s] if s >= 0 else net.nominal[e]) + built.error_rad[e]
        weak = 10 ** (-(built.loss_db[e] + net.length_um[e] * 1e-4 * net.guide_loss_db_per_cm) / 20)
        if name in ("coupler", "crossing"):
            k = value * (1 + net.angle_slope_per_nm * (wave - l0))
            block = np.array([[np.cos(k), 1j * np.sin(k)], [1j * np.sin(k), np.cos(k)]])
            block = weak * (np.array([[0, 1], [1, 0]]) if name == "crossing" else block)
            parts.append(np.block([[np.zeros((2, 2)), block.T], [block, np.zeros((2, 2))]]))
        elif name in ("phase", "guide"):
            turn = value * l0 / wave + 2e3 * np.pi * net.length_um[e] * (index / wave - net.n_eff / l0)
            t = weak * np.exp(1j * turn)
            parts.append(np.array([[0, t], [t, 0]]))
        elif name == "terminator":
            parts.append(np.array([[weak * net.reflections.get(e, 0j)]]))
        elif name == "measured":
            raise NotImplementedError("measured parts have tests of their own")
        else:
            t, r = weak * 10 ** (-net.nominal[e] / 20), weak * net.reflections.get(e, 0j)
            parts.append(np.array([[r, t], [t, r]]))
    return parts


def block_diagonal(parts):
    sizes = np.concatenate([[0], np.cumsum([len(p) for p in parts])])
    s = np.zeros((sizes[-1], sizes[-1]), complex)
    for a, b, part in zip(sizes, sizes[1:], parts, strict=False):
        s[a:b, a:b] = part
    return s


def ends_of(mesh):
    return [mesh.net.externals[n] for n in mesh.net.outputs], [mesh.net.externals[n] for n in mesh.net.inputs]


def dense_matrix(mesh, settings, wavelength_nm=None):
    """[out, in] by one dense solve: waves that enter ports a = P b + e, that leave b = S a."""
    s = block_diagonal(part_matrices(mesh, settings, wavelength_nm))
    linked = np.flatnonzero(mesh.net.mate >= 0)
    across = np.zeros_like(s)
    across[linked, mesh.net.mate[linked]] = 1.0
    out, into = ends_of(mesh)
    entering = np.zeros((len(s), len(into)))
    entering[into, np.arange(len(into))] = 1.0
    return (s @ np.linalg.solve(np.eye(len(s)) - across @ s, entering))[out]


def rf_matrix(mesh, settings, wavelength_nm=None):
    """[out, in] by an RF network library: each cell joined from its parts, then all links one by one."""
    import skrf

    net = mesh.net
    parts = part_matrices(mesh, settings, wavelength_nm)
    groups = {}
    for e, c in enumerate(net.cell_of.tolist()):
        groups.setdefault(c if c >= 0 else f"alone {e}", []).append(e)
    blocks, ports = [], []
    for members in groups.values():
        s, here = join(
            skrf,
            block_diagonal([parts[e] for e in members])[None],
            [p for e in members for p in range(net.port_start[e], net.port_start[e + 1])],
            net.mate,
        )
        blocks.append(s[0])
        ports += here
    s, left = join(skrf, block_diagonal(blocks)[None], ports, net.mate)
    out, into = ends_of(mesh)
    return s[0][np.ix_([left.index(p) for p in out], [left.index(p) for p in into])]


def join(skrf, s, ports, mate):
    for p in list(ports):
        q = int(mate[p])
        if q > p and q in ports:
            s = skrf.network.innerconnect_s(s, ports.index(p), ports.index(q))
            ports = [port for port in ports if port not in (p, q)]
    return s, ports

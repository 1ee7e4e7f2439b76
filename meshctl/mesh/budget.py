"""Loss that light meets between ports: how many parts of each kind, and what each kind costs.

Splitting is not counted: a coupler costs what it loses, not what it sends elsewhere. In a loop-free net every
way from an input to an output is looked at, and the parts are counted on the one of most loss. With loops there
is no longest way; there the parts are those of the way of least loss.
Public: PathLoss, path_losses, path_warnings, islands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import Mesh, Net
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import CROSSING, GUIDE, KINDS, LOSS, MEASURED2, MEASURED4
from meshctl.units import UM_PER_CM, loss_db_from_power, power_from_loss_db

UM_PER_MM = 1e3
PAIRS_MOST = 64  # port pairs listed one by one; beyond, one line for each output
SOURCES_MOST = 64  # inputs from which ways are sought in a net with loops
TOTAL_MOST = 4_000_000  # elements x inputs up to which every pair is followed
DARK_DB = 200.0  # a field this far down is none


@dataclass(frozen=True)
class PathLoss:
    """Loss of the parts met on the ways from one input (or the worst of all) to one output."""

    input: str
    output: str
    least_db: float
    most_db: float
    counts: dict[str, int]  # parts by kind, on the way of most loss
    loss_db: dict[str, float]  # what each kind takes there
    guide_mm: float

    @property
    def couplers(self) -> int:
        return self.counts.get("coupler", 0)

    @property
    def crossings(self) -> int:
        return self.counts.get("crossing", 0)


def part_losses_db(mesh: Mesh) -> np.ndarray:
    """Loss of every part on its way through, f64[E]; what a measured part loses of light entering its first port."""
    net = mesh.net
    loss: np.ndarray = mesh.as_built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
    own = (net.kind == LOSS) | np.isin(net.kind, [k for k, kind in enumerate(KINDS) if kind.reflects])
    loss = np.where(own, loss + net.nominal, loss)
    for e, part in net.measured.items():
        s = part.at(np.array([net.wavelength_nm]))[0]
        half = len(s) // 2
        loss[e] += max(0.0, loss_db_from_power(float((np.abs(s[half:, 0]) ** 2).sum())))
    return loss


def path_losses(mesh: Mesh) -> list[PathLoss]:
    """Ways between the ports of a chip: each pair, or each output where pairs are many."""
    net = mesh.net
    circuit = circuit_of(net)
    loss = part_losses_db(mesh)
    if circuit is None:
        return _shortest(net, loss)
    if len(net.inputs) * net.n_elements > TOTAL_MOST:
        return _followed(mesh, loss, [list(range(len(net.inputs)))])
    found = _followed(mesh, loss, [[k] for k in range(len(net.inputs))])
    return found if len(net.inputs) * len(net.outputs) <= PAIRS_MOST else _worst(found, net.outputs)


def _worst(found: list[PathLoss], outputs: tuple[str, ...]) -> list[PathLoss]:
    """One line for each output: least loss from any input, and the parts on the worst way."""
    kept = []
    for output in outputs:
        mine = [path for path in found if path.output == output]
        if mine:
            w = max(mine, key=lambda path: path.most_db)
            least = min(path.least_db for path in mine)
            kept.append(PathLoss(w.input, output, least, w.most_db, w.counts, w.loss_db, w.guide_mm))
    return kept


def _path(net: Net, names: tuple[str, str], least: float, parts: list[int], loss: np.ndarray) -> PathLoss:
    counts: dict[str, int] = {}
    spent: dict[str, float] = {}
    for e in parts:
        name = KINDS[net.kind[e]].name
        counts[name] = counts.get(name, 0) + 1
        spent[name] = spent.get(name, 0.0) + float(loss[e])
    length = float(net.length_um[parts].sum()) / UM_PER_MM
    return PathLoss(*names, least, float(sum(spent.values())), counts, spent, length)


def _followed(mesh: Mesh, loss: np.ndarray, groups: list[list[int]]) -> list[PathLoss]:
    """Ways through a loop-free net from groups of inputs: least and most loss, and the parts on the latter."""
    net, circuit = mesh.net, circuit_of(mesh.net)
    assert circuit is not None
    n = len(groups)
    least = np.full((circuit.n_lanes, n), math.inf)
    most = np.full((circuit.n_lanes, n), -math.inf)
    for g, group in enumerate(groups):
        least[group, g] = most[group, g] = 0.0
    kinds = len(KINDS)
    counts = np.zeros((circuit.n_lanes, n, kinds), np.int32)
    spent = np.zeros((circuit.n_lanes, n, kinds + 1))  # the last is length
    kind_of, lane_a, lane_b = net.kind.tolist(), circuit.element_lane_a.tolist(), circuit.element_lane_b.tolist()
    for e in circuit.element.tolist():
        a, b, kind, db = lane_a[e], lane_b[e], kind_of[e], float(loss[e])
        if kind == CROSSING:
            for table in (least, most, counts, spent):
                table[[a, b]] = table[[b, a]]
        elif b >= 0:
            least[a] = np.minimum(least[a], least[b])
            from_b = most[b] > most[a]
            for table in (most, counts, spent):
                table[a][from_b] = table[b][from_b]
            for table in (least, most, counts, spent):
                table[b] = table[a]
        lanes = [a] if b < 0 else [a, b]
        least[lanes] += db
        most[lanes] += db
        counts[lanes, :, kind] += 1
        spent[lanes, :, kind] += db
        if kind == GUIDE:
            spent[lanes, :, kinds] += net.length_um[e] / UM_PER_MM
    found = []
    for name, lane in zip(net.outputs, circuit.output_lane.tolist(), strict=True):
        for g, group in enumerate(groups):
            if most[lane, g] > -math.inf:
                entry = net.inputs[group[0]] if len(group) == 1 else "any"
                used = [k for k in range(kinds) if counts[lane, g, k]]
                found.append(
                    PathLoss(
                        entry,
                        name,
                        float(least[lane, g]),
                        float(most[lane, g]),
                        {KINDS[k].name: int(counts[lane, g, k]) for k in used},
                        {KINDS[k].name: float(spent[lane, g, k]) for k in used},
                        float(spent[lane, g, kinds]),
                    )
                )
    return found


def _steps(net: Net, loss: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """(port in, port out, loss, element) of every step of light through a part."""
    start, count, kind = net.port_start[:-1].astype(np.int64), np.diff(net.port_start), net.kind
    rows: list[np.ndarray] = []
    for ways, chosen in (
        (((0, 1), (1, 0)), (count == 2) & (kind != MEASURED2)),
        (((0, 2), (0, 3), (1, 2), (1, 3), (2, 0), (2, 1), (3, 0), (3, 1)), (count == 4) & (kind < MEASURED4)),
    ):
        e = np.flatnonzero(chosen)
        for i, o in ways:
            passes = e[kind[e] != CROSSING] if (i, o) in ((0, 2), (1, 3), (2, 0), (3, 1)) else e
            rows.append(np.column_stack([start[passes] + i, start[passes] + o, loss[passes], passes]))
    for mirror, returns in net.reflections.items():
        for port in range(int(start[mirror]), int(net.port_start[mirror + 1])):
            rows.append(np.array([[port, port, loss_db_from_power(abs(returns) ** 2), mirror]]))
    for row, part in net.measured.items():
        power = np.abs(part.at(np.array([net.wavelength_nm]))[0]) ** 2
        power[power < power_from_loss_db(DARK_DB)] = 0.0
        for o, i in np.argwhere(power > 0.0).tolist():
            lost = loss_db_from_power(min(1.0, float(power[:, i].sum() if o != i else power[o, i])))
            rows.append(np.array([[start[row] + i, start[row] + o, lost, row]]))
    every = np.concatenate([*rows, np.zeros((0, 4))])
    every = every[np.isfinite(every[:, 2]) & (every[:, 2] < DARK_DB)]
    return every[:, 0].astype(np.int64), every[:, 1].astype(np.int64), every[:, 2], every[:, 3].astype(np.int64)


def _shortest(net: Net, loss: np.ndarray) -> list[PathLoss]:
    """Ways of least loss between the ports of a net with loops."""
    from scipy.sparse import csr_matrix
    from scipy.sparse.csgraph import dijkstra

    into, out, db, element = _steps(net, loss)
    n_ports = len(net.mate)
    onward = net.mate[out].astype(np.int64)
    onward[onward < 0] = n_ports + out[onward < 0]  # a port of its own where light leaves
    tie = 1e-9  # of two ways alike the one of fewer parts; a zero would be no link
    by_step = {(i, o): e for i, o, e in zip(into.tolist(), onward.tolist(), element.tolist(), strict=True)}
    graph = csr_matrix((db + tie, (into, onward)), shape=(2 * n_ports, 2 * n_ports))
    few = np.unique(np.linspace(0, len(net.inputs) - 1, min(SOURCES_MOST, len(net.inputs))).astype(int))
    sources, sinks = net.input_ports[few], n_ports + net.output_ports
    far, before = dijkstra(graph, indices=sources, return_predecessors=True)
    pairs = len(net.inputs) * len(net.outputs) <= PAIRS_MOST
    found = []
    for o, sink in enumerate(sinks.tolist()):
        reached = np.flatnonzero(np.isfinite(far[:, sink]))
        if not len(reached):
            continue
        shown = reached if pairs else [reached[int(np.argmax(far[reached, sink]))]]
        for k in shown:
            parts, at = [], sink
            while before[k, at] >= 0:
                parts.append(by_step[int(before[k, at]), at])
                at = int(before[k, at])
            spent = float(far[k, sink]) - tie * len(parts)
            least = spent if pairs else max(0.0, float(far[reached, sink].min()))
            found.append(_path(net, (net.inputs[few[k]], net.outputs[o]), least, parts, loss))
    return found


def islands(net: Net) -> list[list[int]]:
    """Groups of linked elements that no input is joined to."""
    from scipy.sparse import csr_matrix
    from scipy.sparse.csgraph import connected_components

    owner = net.element_of_port
    linked = np.flatnonzero(net.mate >= 0)
    ends = owner[linked], owner[net.mate[linked]]
    count, label = connected_components(csr_matrix((np.ones(len(linked)), ends), shape=(net.n_elements,) * 2))
    lit = set(label[owner[net.input_ports]].tolist())
    return [np.flatnonzero(label == k).tolist() for k in range(count) if k not in lit]


def path_warnings(mesh: Mesh, paths: list[PathLoss]) -> list[str]:
    """What exceeds the mesh's budget: one line for each kind of part, and one for all parts together."""
    budget = mesh.loss_budget_db
    said: list[str] = []
    if math.isnan(budget):
        return said
    for name in dict.fromkeys(name for path in paths for name in path.loss_db):
        over = [path for path in paths if path.loss_db.get(name, 0.0) > budget]
        if over:
            p = max(over, key=lambda path: path.loss_db[name])
            spent, count = p.loss_db[name], p.counts[name]
            said.append(
                f"{p.input} to {p.output}: {count} {name} parts at {spent / count:.3g} dB are {spent:.2f} dB, above "
                f"the budget of {budget:g} dB alone; {100 * power_from_loss_db(spent):.3g} % of the light is left"
            )
    over = [path for path in paths if path.most_db > budget]
    if over:
        p = max(over, key=lambda path: path.most_db)
        listed = ", ".join(f"{count} {name}" for name, count in p.counts.items())
        said.append(
            f"{p.input} to {p.output}: {p.most_db:.2f} dB on the way ({listed}; {p.guide_mm:.2f} mm of guide) is above "
            f"the budget of {budget:g} dB" + (f", as are {len(over) - 1} ways more" if len(over) > 1 else "")
        )
    return said

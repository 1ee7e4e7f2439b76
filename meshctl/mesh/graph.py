"""The chip as records of read-only arrays: what is joined to what, as built, its actuators and its source.

One row per part and no object per element, so that a net of two million elements is a handful of arrays.
Names and the networkx view are made on demand. Letters: E elements, P ports, C cells, S settings,
A actuators, K channels.
Public: Names, ListedNames, Net, AsBuilt, Actuators, Channels, Mesh, frozen, network.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.mesh.spread import Spread
from meshctl.optics.elements import KINDS

if TYPE_CHECKING:  # pragma: no cover
    import networkx
    from scipy.sparse import csr_matrix

    from meshctl.mesh.measured import Measured

FREE = -1  # in `mate`: no partner; in `setting_of`: fixed; in `cell_of`: in no cell


def frozen(array: np.ndarray) -> np.ndarray:
    """The same array, read-only."""
    array.flags.writeable = False
    return array


class Names:
    """Names of elements and cells, made when first asked for."""

    def make_elements(self) -> list[str]:
        raise NotImplementedError

    def make_cells(self) -> list[str]:
        raise NotImplementedError

    @cached_property
    def elements(self) -> list[str]:
        return self.make_elements()

    @cached_property
    def cells(self) -> list[str]:
        return self.make_cells()

    @cached_property
    def element_row(self) -> dict[str, int]:
        return {name: row for row, name in enumerate(self.elements)}

    @cached_property
    def cell_row(self) -> dict[str, int]:
        return {name: row for row, name in enumerate(self.cells)}


class ListedNames(Names):
    """Names given one by one."""

    def __init__(self, elements: Sequence[str], cells: Sequence[str]) -> None:
        self._elements, self._cells = list(elements), list(cells)

    def make_elements(self) -> list[str]:
        return self._elements

    def make_cells(self) -> list[str]:
        return self._cells


@dataclass(frozen=True, eq=False)
class Net:
    """What is joined to what.

    Value in force of an element = its setting (or `nominal` where it has none) + `AsBuilt.error_rad`.
    """

    wavelength_nm: float
    kind: np.ndarray  # u8[E], row in KINDS
    nominal: np.ndarray  # f64[E], rad; dB for a loss
    length_um: np.ndarray  # f64[E], 0 unless a guide
    setting_of: np.ndarray  # i32[E], -1: fixed
    cell_of: np.ndarray  # i32[E], -1: in no cell
    cell_xy_um: np.ndarray  # f64[C, 2]
    port_start: np.ndarray  # i32[E + 1]
    mate: np.ndarray  # i32[P], partner port or -1
    externals: dict[str, int]  # name -> port
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]  # with loops: both are all externals
    n_eff: float
    n_group: float
    guide_loss_db_per_cm: float
    angle_slope_per_nm: float
    names: Names = field(repr=False)
    reflections: dict[int, complex] = field(default_factory=dict)  # element -> field that it returns, both sides
    measured: dict[int, Measured] = field(default_factory=dict)  # element -> its measured S

    @property
    def n_elements(self) -> int:
        return len(self.kind)

    @property
    def n_cells(self) -> int:
        return len(self.cell_xy_um)

    @cached_property
    def n_settings(self) -> int:
        return int(self.setting_of.max(initial=-1)) + 1

    @cached_property
    def first_element(self) -> np.ndarray:
        """The first element that each setting moves, i32[S]."""
        rows = np.flatnonzero(self.setting_of >= 0)[::-1]
        first = np.full(self.n_settings, FREE, np.int32)
        first[self.setting_of[rows]] = rows
        return frozen(first)

    @cached_property
    def setting_names(self) -> list[str]:
        """A setting is named after the first element that it moves."""
        elements = self.names.elements
        return [elements[e] for e in self.first_element.tolist()]

    @cached_property
    def setting_is_angle(self) -> np.ndarray:
        """True where a setting is a coupler's angle, False where it is a phase, bool[S]."""
        return frozen(self.kind[self.first_element] == 0)

    @cached_property
    def element_of_port(self) -> np.ndarray:
        """The element that each port belongs to, i32[P]."""
        counts = np.diff(self.port_start)
        return frozen(np.repeat(np.arange(self.n_elements, dtype=np.int32), counts))

    @property
    def input_ports(self) -> np.ndarray:
        return np.array([self.externals[name] for name in self.inputs], np.int32)

    @property
    def output_ports(self) -> np.ndarray:
        return np.array([self.externals[name] for name in self.outputs], np.int32)

    @property
    def monitors(self) -> tuple[str, ...]:
        """External ports that are neither inputs nor outputs: photodiodes behind taps."""
        used = {*self.inputs, *self.outputs}
        return tuple(name for name in self.externals if name not in used)

    def port_name(self, port: int) -> str:
        """ELEMENT.PORT of a port number."""
        element = int(self.element_of_port[port])
        letters = KINDS[self.kind[element]].ports
        return f"{self.names.elements[element]}.{letters[port - self.port_start[element]]}"


def network(net: Net) -> networkx.MultiGraph:
    """The net as a networkx graph: elements are nodes, links are edges, external ports are nodes too.

    Cost: one Python object per element; meant for nets of up to some 10^5 elements.
    """
    import networkx

    graph = networkx.MultiGraph(wavelength_nm=net.wavelength_nm)
    names = net.names.elements
    for row, name in enumerate(names):
        graph.add_node(name, kind=KINDS[net.kind[row]].name, nominal=float(net.nominal[row]))
    owner = net.element_of_port
    for port in np.flatnonzero(net.mate > np.arange(len(net.mate))).tolist():
        graph.add_edge(
            names[owner[port]],
            names[owner[net.mate[port]]],
            ports=(net.port_name(port), net.port_name(int(net.mate[port]))),
        )
    for name, port in net.externals.items():
        graph.add_node(name, kind="external")
        graph.add_edge(name, names[owner[port]], ports=(name, net.port_name(port)))
    return graph


@dataclass(frozen=True, eq=False)
class AsBuilt:
    """What is known of this die; zero and NaN where nothing is."""

    error_rad: np.ndarray  # f64[E]
    loss_db: np.ndarray  # f64[E], all loss of the part beyond a loss element's own value
    stuck_rad: np.ndarray  # f64[S], NaN: free
    sigma_rad: np.ndarray  # f64[E], standard uncertainty of error_rad

    def in_force(self, settings: np.ndarray) -> np.ndarray:
        """Settings [S] with the stuck ones at their stuck values."""
        return np.where(np.isnan(self.stuck_rad), settings, self.stuck_rad)


@dataclass(frozen=True, eq=False)
class Actuators:
    """What moves the settings; the laws themselves live in `meshctl.laws`."""

    setting: np.ndarray  # i32[A]
    channel: np.ndarray  # i32[A]
    law: np.ndarray  # u8[A], row in laws.LAWS
    params: dict[str, np.ndarray]  # named with units, f64[A], NaN where a law has none
    dead: np.ndarray  # bool[A], stays at its 0 V value
    tables: dict[int, np.ndarray]  # row -> f64[n, 3]: volts, value_rad, sigma_rad
    crosstalk: csr_matrix | None  # [S, A], rad per rad, no diagonal; None: none
    given_names: dict[int, str]  # rows named otherwise than their setting

    def __len__(self) -> int:
        return len(self.setting)

    def names(self, net: Net) -> list[str]:
        """Names of all actuators: their element's unless the mesh says otherwise."""
        settings = net.setting_names
        return [self.given_names.get(a, settings[s]) for a, s in enumerate(self.setting.tolist())]


@dataclass(frozen=True, eq=False)
class Channels:
    """The outputs of the source; one that drives current goes from min_ma to max_ma in place of volts."""

    by_current: np.ndarray  # bool[K]
    bits: np.ndarray  # i32[K]
    min_v: np.ndarray  # f64[K]
    max_v: np.ndarray
    min_ma: np.ndarray  # f64[K]
    max_ma: np.ndarray
    offset_v: np.ndarray  # mA where current is driven
    gain: np.ndarray  # volts at the terminal = gain * (min_v .. max_v) + offset_v
    limit_v: np.ndarray
    limit_ma: np.ndarray
    limit_mw: np.ndarray
    ramp_v_per_s: np.ndarray
    ground: np.ndarray  # i32[K], row in ground_ohm, -1: none
    ground_ohm: np.ndarray  # f64[G]
    given_names: dict[int, str]  # rows named otherwise than the actuator they started as
    ground_names: tuple[str, ...] = ()

    def __len__(self) -> int:
        return len(self.bits)


@dataclass(frozen=True, eq=False)
class Mesh:
    """A chip: what `load` and `lattice` return."""

    name: str
    net: Net
    as_built: AsBuilt
    actuators: Actuators
    channels: Channels
    spread: Spread
    hash: str  # sha256 of what the forward path reads
    shape: str = ""  # lattice name, or "" for an explicit net
    rest: str = ""  # the state that a cell falls to without drive
    loss_budget_db: float = float("nan")
    note: str = ""
    text: str = field(default="", repr=False)  # mesh.toml as it was read
    folder: Path | None = None

    @cached_property
    def channel_names(self) -> list[str]:
        """Names of all channels: that of their first actuator unless the mesh says otherwise."""
        names: list[str] = [""] * len(self.channels)
        actuators = self.actuators.names(self.net)
        for a in range(len(self.actuators) - 1, -1, -1):
            names[self.actuators.channel[a]] = actuators[a]
        for k, name in self.channels.given_names.items():
            names[k] = name
        return names

    @cached_property
    def actuator_names(self) -> list[str]:
        return self.actuators.names(self.net)

    def __repr__(self) -> str:
        net, at = self.net, f", folder='{self.folder}'" if self.folder else ""
        ports = f"{len(net.inputs)} in, {len(net.outputs)} out"
        return f"<Mesh '{self.name}': {self.shape or 'explicit'}, {ports}, {net.n_cells} cells{at}>"

    def _repr_html_(self) -> str:
        from html import escape

        net = self.net
        rows: list[tuple[str, Any]] = [
            ("shape", self.shape or "explicit"),
            ("ports", f"{len(net.inputs)} in, {len(net.outputs)} out"),
            ("cells", net.n_cells),
            ("settings", net.n_settings),
            ("wavelength", f"{net.wavelength_nm} nm"),
        ]
        body = "".join(f"<tr><th>{k}</th><td>{escape(str(v))}</td></tr>" for k, v in rows)
        return f"<table><caption>mesh {escape(self.name)}</caption>{body}</table>"

"""mesh.toml as a checked structure: what may stand in it, and clear messages where something else does.

Public: Description, parse_description.
"""

from __future__ import annotations

import math
import tomllib
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    StrictBool,
    ValidationError,
    model_validator,
)

from meshctl.errors import Finding, MissingRow, NotFinite, OutOfRange, UnknownKey, UnsoundFile
from meshctl.mesh.lattices import LATTICES, PLANE_SIZES
from meshctl.mesh.quantities import QUANTITIES
from meshctl.mesh.spread import CAUSES
from meshctl.mesh.tables import unknown_name

MESH_TOML = "mesh.toml"


class _Refused(ValueError):
    """Carries our own finding through pydantic."""

    def __init__(self, finding: Finding) -> None:
        self.finding = finding
        super().__init__(str(finding))


def _quantity(name: str) -> AfterValidator:
    quantity = QUANTITIES[name]

    def check(value: Any) -> Any:
        if not math.isfinite(value):
            left_out = "" if math.isnan(quantity.default) else ", or leave the key out"
            raise _Refused(NotFinite(f"{value} is no number to use", remedy=f"write {quantity.allowed}{left_out}"))
        if not quantity.allows(value):
            raise _Refused(OutOfRange(f"{value:g} is out of range", remedy=f"allowed is {quantity.allowed}"))
        return value

    return AfterValidator(check)


def _only_numbers(name: str, *, whole: bool = False) -> BeforeValidator:
    """Neither texts nor truths are taken for numbers."""

    def check(value: Any) -> Any:
        kind = "whole number" if whole else "number"
        broken = whole and isinstance(value, float) and math.isfinite(value) and value != int(value)
        if isinstance(value, bool) or not isinstance(value, int | float) or broken:
            shown = str(value).lower() if isinstance(value, bool) else _shown(value)
            said = f"{shown} stands where a {kind} must"
            raise _Refused(UnsoundFile(said, remedy=f"write a {kind}, {QUANTITIES[name].allowed}"))
        return value

    return BeforeValidator(check)


def _number(name: str) -> Any:
    return Annotated[float, _only_numbers(name), _quantity(name)]


def _count(name: str) -> Any:
    return Annotated[int, _only_numbers(name, whole=True), _quantity(name)]


def _shown(value: Any) -> str:
    return f"a {'table' if isinstance(value, dict) else 'list'}" if isinstance(value, dict | list) else repr(value)


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=False, defer_build=True)


class LatticePart(_Strict):
    shape: str
    modes: _count("modes") | None = None  # type: ignore[valid-type]
    cell: Literal["mzi", "gap"] = "mzi"
    pitch_um: tuple[_number("pitch_um"), _number("pitch_um")] = (400.0, 127.0)  # type: ignore[valid-type]
    spare: _count("spare") = 0  # type: ignore[valid-type]
    output_phases: StrictBool = True
    balanced: StrictBool = False
    rings: _count("rings") | None = None  # type: ignore[valid-type]
    rows: _count("rows") | None = None  # type: ignore[valid-type]
    columns: _count("columns") | None = None  # type: ignore[valid-type]
    side_um: _number("side_um") = QUANTITIES["side_um"].default  # type: ignore[valid-type]

    def plane_size(self) -> dict[str, int]:
        """Keys and values that size a lattice with loops."""
        return {key: getattr(self, key) for key in ("rings", "rows", "columns") if getattr(self, key) is not None}

    @model_validator(mode="after")
    def _known_shape(self) -> LatticePart:
        if self.shape not in LATTICES:
            raise _Refused(unknown_name("shape", self.shape, LATTICES, ""))
        sizes, given = PLANE_SIZES.get(self.shape), tuple(self.plane_size())
        others = {"side_um"} if sizes is None else {"modes", "spare", "pitch_um", "output_phases", "balanced"}
        for key in (*(given if sizes is None else ()), *sorted(others & self.model_fields_set)):
            raise _Refused(UnknownKey(f"a {self.shape} lattice takes no '{key}'", remedy="remove it"))
        if sizes is not None and given not in sizes:
            wanted = " or ".join(" and ".join(f"'{key}'" for key in way) for way in sizes)
            found = " and ".join(f"'{key}'" for key in given) or "nothing"
            raise _Refused(
                MissingRow(f"a {self.shape} lattice needs {wanted}, not {found}", remedy="write its size so")
            )
        if sizes is not None:
            return self
        if self.modes is None and self.shape != "switch":
            raise _Refused(MissingRow(f"a {self.shape} lattice needs 'modes'", remedy="write how many lanes it has"))
        return self


class GuidePart(_Strict):
    n_eff: _number("n_eff") = QUANTITIES["n_eff"].default  # type: ignore[valid-type]
    n_group: _number("n_group") = QUANTITIES["n_group"].default  # type: ignore[valid-type]
    loss_db_per_cm: _number("loss_db_per_cm") = 0.0  # type: ignore[valid-type]


class CouplerPart(_Strict):
    loss_db: _number("loss_db") = 0.0  # type: ignore[valid-type]
    angle_slope_per_nm: _number("angle_slope_per_nm") = 0.0  # type: ignore[valid-type]


class CrossingPart(_Strict):
    loss_db: _number("loss_db") = 0.0  # type: ignore[valid-type]


class ChannelPart(_Strict):
    drives: Literal["volts", "milliamps"] = "volts"
    bits: _count("bits") = 16  # type: ignore[valid-type]
    min_v: _number("min_v") = 0.0  # type: ignore[valid-type]
    max_v: _number("max_v") = 10.0  # type: ignore[valid-type]
    min_ma: _number("min_ma") = 0.0  # type: ignore[valid-type]
    max_ma: _number("max_ma") = 20.0  # type: ignore[valid-type]
    offset_v: _number("offset_v") = 0.0  # type: ignore[valid-type]
    gain: _number("gain") = 1.0  # type: ignore[valid-type]
    limit_v: _number("limit_v") | None = None  # type: ignore[valid-type]
    limit_ma: _number("limit_ma") | None = None  # type: ignore[valid-type]
    limit_mw: _number("limit_mw") | None = None  # type: ignore[valid-type]
    ramp_v_per_s: _number("ramp_v_per_s") | None = None  # type: ignore[valid-type]
    ground: str | None = None


class GroundPart(_Strict):
    resistance_ohm: _number("resistance_ohm")  # type: ignore[valid-type]


class CrosstalkPart(_Strict):
    """Thermal crosstalk from the places of all arms; heaters lie on the upper arm unless their `arm` is -1."""

    law: Literal["exponential", "inverse"]
    amplitude: _number("amplitude")  # type: ignore[valid-type]
    distance_um: _number("distance_um")  # type: ignore[valid-type]
    arm_um: _number("arm_um")  # type: ignore[valid-type]
    keep_above: _number("keep_above") = 0.0  # type: ignore[valid-type]


class RestPart(_Strict):
    state: Literal["bar", "cross", "unknown"] = "unknown"


class BudgetPart(_Strict):
    loss_db: _number("loss_db")  # type: ignore[valid-type]


class ShapePart(_Strict):
    """How one cause of [spread] is distributed, and what its parts share."""

    distribution: Literal["normal", "uniform", "samples"] = "normal"
    wafer: _number("variance_share") = 0.0  # type: ignore[valid-type]
    gradient: _number("variance_share") = 0.0  # type: ignore[valid-type]
    correlated: _number("variance_share") = 0.0  # type: ignore[valid-type]
    correlation_um: _number("correlation_um") | None = None  # type: ignore[valid-type]
    file: str | None = None


class SpreadPart(_Strict):
    split_rad: _number("split_rad") = 0.0  # type: ignore[valid-type]
    phase_rad: _number("sigma_rad") = 0.0  # type: ignore[valid-type]
    loss_db: _number("loss_db") = 0.0  # type: ignore[valid-type]
    p2pi_share: _number("p2pi_share") = 0.0  # type: ignore[valid-type]
    r_share: _number("r_share") = 0.0  # type: ignore[valid-type]
    crosstalk_share: _number("crosstalk_share") = 0.0  # type: ignore[valid-type]
    noise_v: _number("noise_v") = 0.0  # type: ignore[valid-type]
    temperature_k: _number("temperature_k") = 0.0  # type: ignore[valid-type]
    phase_rad_per_k: _number("phase_rad_per_k") = 0.0  # type: ignore[valid-type]
    laser_nm: _number("laser_nm") = 0.0  # type: ignore[valid-type]
    stuck_share: _number("stuck_share") = 0.0  # type: ignore[valid-type]
    shape: dict[str, ShapePart] = {}
    between: list[tuple[str, str, _number("correlation")]] = []  # type: ignore[valid-type]

    @model_validator(mode="after")
    def _known_causes(self) -> SpreadPart:
        for name in (*self.shape, *(cause for pair in self.between for cause in pair[:2])):
            if name not in CAUSES:
                raise _Refused(unknown_name("cause", name, CAUSES, ""))
        for first, second, value in self.between:
            if first == second or CAUSES[first].parts != CAUSES[second].parts:
                raise _Refused(
                    UnsoundFile(
                        f"{first} and {second} are drawn for {CAUSES[first].parts} and {CAUSES[second].parts}; "
                        f"a correlation of {value:g} is for two causes of the same parts",
                        remedy="remove that line of 'between'",
                    )
                )
        for name, shape in self.shape.items():
            if (shape.distribution == "samples") != (shape.file is not None):
                raise _Refused(
                    UnsoundFile(
                        f"the shape of {name} is {shape.distribution} and its file {shape.file!r}",
                        remedy='give distribution = "samples" together with file, or neither',
                    )
                )
        return self


class InsertPart(_Strict):
    name: str
    kind: Literal[
        "tap",
        "loss",
        "guide",
        "phase",
        "isolation",
        "tether",
        "crossing",
        "mirror",
        "terminator",
        "measured",
    ]
    at: str
    monitor: str | None = None
    cross_power: _number("cross_power") | None = None  # type: ignore[valid-type]
    angle_rad: _number("angle_rad") | None = None  # type: ignore[valid-type]
    loss_db: _number("loss_db") | None = None  # type: ignore[valid-type]
    length_um: _number("length_um") | None = None  # type: ignore[valid-type]
    phase_rad: _number("phase_rad") | None = None  # type: ignore[valid-type]
    transmitted_power: _number("transmitted_power") | None = None  # type: ignore[valid-type]
    reflected_power: _number("reflected_power") | None = None  # type: ignore[valid-type]
    reflection_db: _number("reflection_db") | None = None  # type: ignore[valid-type]
    reflection_rad: _number("reflection_rad") | None = None  # type: ignore[valid-type]
    file: str | None = None
    ports: list[str] | None = None
    time: str | None = None


class CellPart(_Strict):
    elements: list[str]
    at_um: tuple[_number("at_um"), _number("at_um")] | None = None  # type: ignore[valid-type]


class Description(_Strict):
    """All of mesh.toml."""

    format: Literal[1]
    name: Annotated[str, Field(min_length=1)]
    note: str = ""
    wavelength_nm: _number("wavelength_nm")  # type: ignore[valid-type]
    lattice: LatticePart | None = None
    inputs: list[str] | None = None
    outputs: list[str] | None = None
    monitors: list[str] = []
    elements: list[list[Any]] | None = None
    tunable: list[str] = []
    links: list[str] | None = None
    cells: dict[str, CellPart] = {}
    insert: list[InsertPart] = []
    guide: GuidePart = GuidePart()
    coupler: CouplerPart = CouplerPart()
    crossing: CrossingPart = CrossingPart()
    actuator: dict[Literal["phase", "coupler"], dict[str, Any]] = {}
    channel: ChannelPart = ChannelPart()
    ground: dict[str, GroundPart] = {}
    crosstalk: CrosstalkPart | None = None
    rest: RestPart = RestPart()
    budget: BudgetPart | None = None
    spread: SpreadPart = SpreadPart()

    @model_validator(mode="after")
    def _one_kind_of_net(self) -> Description:
        explicit = self.elements is not None or self.links is not None
        if explicit == (self.lattice is not None):
            raise _Refused(
                UnsoundFile(
                    "the net is given twice, as [lattice] and by elements and links" if explicit else "no net is given",
                    remedy="give either [lattice], or both 'elements' and 'links'",
                )
            )
        if explicit and (self.elements is None or self.links is None):
            missing = "links" if self.links is None else "elements"
            raise _Refused(MissingRow(f"'{missing}' is missing", remedy="an explicit net needs both"))
        if self.lattice is not None and (self.inputs or self.outputs or self.tunable or self.cells):
            raise _Refused(
                UnsoundFile(
                    "inputs, outputs, tunable and cells belong to explicit nets",
                    remedy="a lattice names its own; remove them",
                )
            )
        if self.channel.max_ma <= self.channel.min_ma:
            raise _Refused(
                OutOfRange(
                    f"channel.max_ma {self.channel.max_ma:g} mA is not above min_ma {self.channel.min_ma:g} mA",
                    remedy="raise max_ma",
                )
            )
        if self.channel.max_v <= self.channel.min_v:
            raise _Refused(
                OutOfRange(
                    f"channel.max_v {self.channel.max_v:g} V is not above min_v {self.channel.min_v:g} V",
                    remedy="raise max_v",
                )
            )
        if self.channel.ground is not None and self.channel.ground not in self.ground:
            raise _Refused(unknown_name("ground", self.channel.ground, self.ground, ""))
        return self


# what pydantic calls a fault, and what may stand there
_ALLOWED = {
    "string_type": "a text",
    "string_too_short": "a text of one character or more",
    "list_type": "a list",
    "tuple_type": "a list",
    "too_long": "a shorter list",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "bool_type": "true or false",
}
_EXAMPLES = {
    "name": '"mychip"',
    "pitch_um": "[400.0, 127.0]",
    "at_um": "[400.0, 127.0]",
    "links": '["in1 a.a1", "a.b1 out1"]',
    "elements": '[["a", "coupler"]]',
    "inputs": '["in1", "in2"]',
    "outputs": '["out1", "out2"]',
    "monitors": '["m1"]',
    "tunable": '["a"]',
}


def _allowed_keys(location: tuple[Any, ...]) -> list[str]:
    model: Any = Description
    for step in location[:-1]:
        if isinstance(step, int):
            continue
        field = getattr(model, "model_fields", {}).get(step)
        if field is None:
            return []
        model = next(
            (
                a
                for a in (field.annotation, *getattr(field.annotation, "__args__", ()))
                if isinstance(a, type) and issubclass(a, BaseModel)
            ),
            None,
        )
    return list(getattr(model, "model_fields", {}))


def _finding(problem: Any, source: str) -> Finding:
    location = tuple(step for step in problem["loc"] if step not in ("[key]",))
    key = ".".join(str(step + 1) if isinstance(step, int) else step for step in location)
    where = f"{source} key '{key}'" if key else source
    kind, value = problem["type"], problem.get("input")
    carried = problem.get("ctx", {}).get("error")
    if isinstance(carried, _Refused):
        finding = carried.finding
        finding.where = where
        return finding
    if kind == "extra_forbidden":
        return unknown_name("key", str(location[-1]), _allowed_keys(location), where)
    if kind == "missing":
        return MissingRow("the key is missing", where=where, remedy="add it")
    if kind == "literal_error":
        allowed = problem["ctx"]["expected"]
        wrong = UnknownKey if isinstance(value, str) else UnsoundFile
        return wrong(f"the value is {value!r}; allowed is {allowed}", where=where, remedy="correct it")
    if kind not in _ALLOWED:
        return UnsoundFile(f"the value is {_shown(value)}; {problem['msg'].lower()}", where=where, remedy="correct it")
    example = _EXAMPLES.get(str(location[-1]), "")
    allowed = _ALLOWED[kind] + (f", such as {example}" if example else "")
    return UnsoundFile(f"the value is {_shown(value)}; allowed is {allowed}", where=where, remedy="correct it")


def _control_code(value: Any) -> str | None:
    """The first text, key or value, with a character that would steer a terminal."""
    if isinstance(value, str):
        return value if any((ord(c) < 32 and c not in "\n\t") or 127 <= ord(c) < 160 for c in value) else None
    parts = [*value, *value.values()] if isinstance(value, dict) else value if isinstance(value, list) else []
    return next((found for found in map(_control_code, parts) if found is not None), None)


def parse_description(text: str, source: str = MESH_TOML) -> Description:
    """Parse and check the text of a mesh.toml.

    Raises
    ------
    UnsoundFile or a finding under it, naming the key, the value, what is allowed and what to do.
    """
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise UnsoundFile(f"not readable as TOML: {problem}", where=source, remedy="mend that line") from None
    spoilt = _control_code(raw)
    if spoilt is not None:
        raise UnsoundFile(f"the text {spoilt!r} has control codes", where=source, remedy="leave them out")
    if raw.get("format") not in (None, 1):
        raise UnsoundFile(
            f"format is {raw['format']!r}; this version reads format 1",
            where=f"{source} key 'format'",
            remedy="update meshctl, or write the folder again in format 1",
        )
    try:
        return Description.model_validate(raw)
    except ValidationError as problem:
        raise _finding(problem.errors(include_url=False)[0], source) from None

"""The channels of the source, from mesh.toml and channels.csv.

Public: join_channels, plain_channels, CHANNEL_NUMBERS, DRIVES.
"""

from __future__ import annotations

import math

import numpy as np

from meshctl.errors import DuplicateName, OutOfRange, UnknownKey
from meshctl.mesh.description import Description
from meshctl.mesh.graph import FREE, Channels, frozen
from meshctl.mesh.tables import Table, unknown_name

CHANNEL_NUMBERS = (
    "bits",
    "min_v",
    "max_v",
    "min_ma",
    "max_ma",
    "offset_v",
    "gain",
    "limit_v",
    "limit_ma",
    "limit_mw",
    "ramp_v_per_s",
)
DRIVES = ("volts", "milliamps")


def join_channels(
    description: Description,
    names: list[str],
    named: dict[int, str],
    table: Table | None,
) -> tuple[np.ndarray, Channels]:
    """The channel of every actuator and the channels: rows of channels.csv first, then as they appear."""
    grounds = list(description.ground)
    order: dict[str, int] = {}
    if table is not None:
        for i, name in enumerate(table.column("channel")):
            if name in order:
                raise DuplicateName(f"channel '{name}' stands twice", where=table.where(i), remedy="keep one row")
            order[name] = i
    wanted = [named.get(a, names[a]) for a in range(len(names))]
    used = set(wanted)
    for name, i in order.items():
        if name not in used:
            raise UnknownKey(
                f"no actuator sits on channel '{name}'",
                where=table.where(i) if table else "",
                remedy="correct the name, or put an actuator on it in actuators.csv",
            )
    for name in wanted:
        order.setdefault(name, len(order))
    n = len(order)
    columns, ground, by_current = _plain_columns(description, n)
    for i in range(len(table) if table is not None else 0):
        assert table is not None
        for key in CHANNEL_NUMBERS:
            value = table.column(key)[i]
            if value is not None:
                columns[key][i] = value
        name = table.column("ground")[i]
        if name is not None:
            if name not in grounds:
                raise unknown_name("ground", name, grounds, table.where(i))
            ground[i] = grounds.index(name)
        drives = table.column("drives")[i]
        if drives is not None:
            if drives not in DRIVES:
                raise unknown_name("drive", drives, DRIVES, table.where(i))
            by_current[i] = drives == DRIVES[1]
        for low, high, unit in (("min_v", "max_v", "V"), ("min_ma", "max_ma", "mA")):
            if columns[high][i] <= columns[low][i]:
                raise OutOfRange(
                    f"{high} {columns[high][i]:g} {unit} is not above {low} {columns[low][i]:g} {unit}",
                    where=table.where(i),
                    remedy=f"raise {high}",
                )
        if columns["bits"][i] != int(columns["bits"][i]):
            raise OutOfRange(f"bits is {columns['bits'][i]:g}", where=table.where(i), remedy="write a whole number")
    channel = np.array([order[name] for name in wanted], np.int32)
    first_user = {int(k): a for a, k in reversed(list(enumerate(channel.tolist())))}
    given = {k: name for name, k in order.items() if name != names[first_user[k]]}
    channels = _made(description, columns, ground, by_current, given)
    return channel, channels


def _plain_columns(description: Description, n: int) -> tuple[dict[str, np.ndarray], np.ndarray, np.ndarray]:
    """The columns of n channels that are all as mesh.toml says, their grounds, and whether they drive current."""
    default = description.channel
    columns = {}
    for key in CHANNEL_NUMBERS:
        value = getattr(default, key)
        columns[key] = np.full(n, math.inf if value is None else float(value))
    row = list(description.ground).index(default.ground) if default.ground else FREE
    return columns, np.full(n, row, np.int32), np.full(n, default.drives == DRIVES[1])


def _made(
    description: Description,
    columns: dict[str, np.ndarray],
    ground: np.ndarray,
    by_current: np.ndarray,
    given_names: dict[int, str],
) -> Channels:
    arrays = {key: frozen(column) for key, column in columns.items()}
    arrays["bits"] = frozen(columns["bits"].astype(np.int32))
    ohm = np.array([part.resistance_ohm for part in description.ground.values()], float)
    return Channels(
        by_current=frozen(by_current),
        ground=frozen(ground),
        ground_ohm=frozen(ohm),
        given_names=given_names,
        ground_names=tuple(description.ground),
        **arrays,
    )


def plain_channels(description: Description, n: int) -> Channels:
    """n channels that are all as mesh.toml says."""
    return _made(description, *_plain_columns(description, n), {})

"""The mesh as a scrolling picture: a window of the raster looked up in tables, and only changed lines sent again.

Public: MeshCanvas.
"""

from __future__ import annotations

import math
from itertools import groupby

import numpy as np
from rich.segment import Segment
from textual import events
from textual.geometry import Region, Size
from textual.message import Message
from textual.scroll_view import ScrollView
from textual.strip import Strip

from meshctl.picture_lanes import LINES, WEIGHTS_DB, Layout, before_crossing, is_crossing, layout_of
from meshctl.picture_light import lane_ends
from meshctl.picture_states import BAR, CROSS, UNKNOWN, state_of
from meshctl.screens import raster
from meshctl.screens.tints import FAULT, LABEL, N_STYLES, STATE_FIRST, STEPS, Looks
from meshctl.units import db_array
from meshctl.work import Work

SPAN_DB = 40.0  # of light, from the brightest step to the darkest
SLANTED = np.array([[ord(c) for c in row] for row in ("━╍─╌·", "╱╱╱╱╱", "╲╲╲╲╲", "┃┇│╎·")], np.uint32)
SPACE = ord(" ")


class MeshCanvas(ScrollView, can_focus=True):
    """Waveguides, cells and light of a piece of work."""

    class Picked(Message):
        """A cell was clicked."""

        def __init__(self, cell: int) -> None:
            self.cell = cell
            super().__init__()

    def __init__(self, work: Work, looks: Looks, zoom: int = 1) -> None:
        super().__init__()
        self.work, self.looks, self.zoom, self.cell = work, looks, zoom, 0
        self._rasters: dict[int, raster.Raster] = {}
        self._layout: Layout | None = None
        self._ports = np.empty(0, np.int64)
        self._version = 0
        self._key: tuple[object, ...] = ()
        self._frame: list[Strip] = []
        self._read()

    # ---- tables
    @property
    def raster(self) -> raster.Raster:
        """The raster of the zoom in use."""
        if self.zoom not in self._rasters:
            work = self.work
            if work.loops:
                self._rasters[self.zoom], self._ports = raster.places(work.mesh.net, work.sites, self.zoom)
            else:
                if self._layout is None:
                    self._layout = layout_of(work.mesh.net, work.sites, LINES)
                self._rasters[self.zoom] = raster.lanes(self._layout, work.sites, self.zoom)
        return self._rasters[self.zoom]

    def _read(self) -> None:
        """Take light and states from the work: weights and brightness of strands, characters of sites."""
        work, page = self.work, self.raster
        sites = work.sites
        level = db_array(np.append(self._powers(), 0.0))  # the last serves places without a strand
        weight = sum((level < least).astype(np.int64) for least in WEIGHTS_DB)
        self._weight = np.asarray(weight, np.int64)
        dark = np.clip(-np.nan_to_num(level, neginf=-SPAN_DB, nan=-SPAN_DB) / SPAN_DB, 0.0, 1.0)
        self._step = np.round((STEPS - 1) * (1.0 - dark)).astype(np.int64)
        self._tint = np.where(sites.fault, FAULT, STATE_FIRST + state_of(sites.cross_power))
        self._glyphs = self._characters(page.n_roles)
        self.virtual_size = Size(page.width, page.height)
        self._version += 1

    def _powers(self) -> np.ndarray:
        work = self.work
        lit, sites = work.lit, work.sites
        if work.loops:
            return lit[self._ports]
        net, layout = work.mesh.net, self._layout
        assert layout is not None
        start, end = lane_ends(net, lit)
        leave = sites.last_block
        turned = (layout.circuit.lane_a[leave] != sites.lane_a) ^ before_crossing(net, sites)
        behind = np.column_stack([lit[leave, np.where(turned, 3, 2)], lit[leave, np.where(turned, 2, 3)]])
        lane = np.column_stack([sites.lane_a, sites.lane_b]).ravel()
        last = np.full(len(start), -1)
        last[lane] = np.arange(len(lane))  # the last write of each lane stays
        powers = np.concatenate([start, behind.ravel()])
        met = last >= 0
        powers[len(start) + last[met]] = end[met]
        return powers

    def _characters(self, n_roles: int) -> np.ndarray:
        """Code points [U + 1, roles]; 0 shows the strand below."""
        sites, zoom = self.work.sites, self.zoom
        power, n = sites.cross_power, len(sites)
        state = state_of(power)
        crossing = is_crossing(self.work.mesh.net, sites)
        table = np.zeros((n + 1, n_roles), np.uint32)
        percent = np.clip(np.round(100 * np.nan_to_num(power)), 1, 99).astype(int)
        split = (state != BAR) & (state != CROSS) & (state != UNKNOWN) & ~sites.fault & ~crossing
        mark = np.select(
            [sites.fault, crossing, state == BAR, state == CROSS, state == UNKNOWN],
            [ord("!"), ord("×"), ord("═"), ord("╳"), ord("o")],
            SPACE,
        )
        tens, ones = ord("0") + percent // 10, ord("0") + percent % 10
        if self.work.loops:
            self._put(table, ((0, SPACE), (1, mark), (2, SPACE)))
            if zoom == 0:
                table[:n][split, 1] = tens[split]
            else:
                table[:n][split, 0], table[:n][split, 1] = tens[split], ones[split]
            if zoom == 2:
                self._write(table, 3, self._names())
            return table
        if zoom == 0:
            upper = np.select([sites.fault, crossing, state == CROSS], [ord("!"), ord("×"), ord("╲")], mark)
            lower = np.select([sites.fault, crossing, state == CROSS], [ord("!"), ord("×"), ord("╱")], mark)
            self._put(table, ((1, np.where(split, tens, upper)), (4, np.where(split, ones, lower))))
            return table
        bar = state == BAR
        cross = state == CROSS
        for role, (through, bent) in enumerate(zip("╲ ╱╱ ╲", "╮ ╭╯ ╰", strict=True)):
            table[:n, role] = np.where(bar, 0, np.where(cross, ord(through), ord(bent)))
        table[:n, 9] = np.where(bar, ord("┊"), ord("│"))
        if zoom == 1:
            self._put(table, ((6, SPACE), (7, mark), (8, SPACE)))
            table[:n][split, 6], table[:n][split, 7] = tens[split], ones[split]
            return table
        words = [
            ("! fault" if f else "crossing" if c else chr(m) if m != SPACE else "")
            + ("" if math.isnan(p) else f" {100 * p:.1f} %")
            for f, c, m, p in zip(sites.fault.tolist(), crossing.tolist(), mark.tolist(), power.tolist(), strict=True)
        ]
        for line, texts in enumerate((self._names(), words, self._angles())):
            self._write(table, 10 + line * raster.CARD, texts)
        return table

    @staticmethod
    def _put(table: np.ndarray, columns: tuple[tuple[int, int | np.ndarray], ...]) -> None:
        for role, value in columns:
            table[:-1, role] = value

    @staticmethod
    def _write(table: np.ndarray, first: int, texts: list[str]) -> None:
        for row, text in enumerate(texts):
            shown = text[: raster.CARD].center(raster.CARD)
            table[row, first : first + raster.CARD] = [ord(c) for c in shown]

    def _names(self) -> list[str]:
        names = self.work.mesh.net.names.cells
        return [names[c] if c >= 0 else "" for c in self.work.sites.cell.tolist()]

    def _angles(self) -> list[str]:
        """The setting that switches each cell, in rad."""
        switches, actual = self.work.switches, self.work.actual
        setting = dict(zip(switches.cell[switches.of].tolist()[::-1], switches.setting.tolist()[::-1], strict=True))
        cells = self.work.sites.cell.tolist()
        return [f"{actual[setting[c]]:.3f} rad" if c in setting else "" for c in cells]

    # ---- drawing
    def _window(self) -> tuple[np.ndarray, np.ndarray]:
        """Characters and styles of what is in view."""
        page, size = self.raster, self.size
        x, y = self.scroll_offset
        view = np.s_[y : y + size.height, x : x + size.width]
        site, strand = page.site[view], page.strand[view]
        glyph = self._glyphs[site, page.role[view]]
        character = np.where(strand >= 0, SLANTED[page.stroke[view], self._weight[strand]], SPACE)
        owned = (site >= 0) & (glyph != 0)
        label = page.label[view]
        named = (label != 0) & ~owned & (strand < 0)
        character = np.where(owned, glyph, np.where(named, label, character))
        style = np.where(named, LABEL, self._step[strand])
        style = np.where(owned, np.append(self._tint, LABEL)[site], style)
        mine = np.append(self.work.sites.cell == self.cell, False)[site]
        return character, style + N_STYLES * (mine & owned)

    def _lines(self) -> list[Strip]:
        key = (self._version, self.scroll_offset, self.size, self.cell, self.zoom)
        if key != self._key:
            character, style = self._window()
            self._key, self._frame = (
                key,
                [self._strip(row, kinds) for row, kinds in zip(character.tolist(), style.tolist(), strict=True)],
            )
        return self._frame

    def _strip(self, characters: list[int], kinds: list[int]) -> Strip:
        text = "".join(map(chr, characters))
        segments, at = [], 0
        for kind, run in groupby(kinds):
            stop = at + sum(1 for _ in run)
            segments.append(Segment(text[at:stop], self.looks.list[kind]))
            at = stop
        return Strip(segments, len(text)).adjust_cell_length(self.size.width, self.looks.list[LABEL])

    def render_line(self, y: int) -> Strip:
        """One line of what is in view."""
        lines = self._lines()
        return lines[y] if y < len(lines) else Strip.blank(self.size.width, self.looks.list[LABEL])

    def _changed(self) -> None:
        """Send again the lines that differ from those shown."""
        before = self._frame
        after = self._lines()
        if len(before) != len(after):
            self.refresh()
            return
        for y, (old, new) in enumerate(zip(before, after, strict=True)):
            if old != new:
                self.refresh(Region(0, y, self.size.width, 1))

    # ---- what the screen asks for
    def renew(self) -> None:
        """Show the work as it is now."""
        self._read()
        self._changed()

    def select(self, cell: int) -> None:
        """Mark a cell and bring it into view."""
        self.cell = cell
        at = self._mark(cell)
        if at is not None:
            row, column = at
            wide, high = raster.CARD, 3
            around = Region(max(column - wide // 2, 0), max(row - high // 2, 0), wide, high)
            around = around.intersection(Region(0, 0, self.raster.width, self.raster.height))
            if not Region(*self.scroll_offset, *self.size).contains_region(around):
                self.scroll_to_region(around, animate=False, force=True)
        self._changed()

    def _mark(self, cell: int) -> tuple[int, int] | None:
        found = np.flatnonzero((self.work.sites.cell == cell) & (self.raster.at[:, 0] >= 0))
        return tuple(self.raster.at[found[0]].tolist()) if len(found) else None

    def set_zoom(self, zoom: int) -> None:
        """Draw larger or smaller, the selected cell in view."""
        self.zoom = min(max(zoom, 0), raster.ZOOMS - 1)
        self._read()
        self.refresh()
        self.call_after_refresh(self.select, self.cell)

    def neighbour(self, dx: int, dy: int) -> int:
        """The nearest cell in a direction; the same where there is none."""
        here = self._mark(self.cell)
        at, cell = self.raster.at, self.work.sites.cell
        if here is None:
            drawn = cell[(cell >= 0) & (at[:, 0] >= 0)]
            return int(drawn[0]) if len(drawn) else self.cell
        aside, along = (at[:, 0] - here[0]) * 2, at[:, 1] - here[1]
        onward, across = (along * dx, aside) if dx else (aside * dy, along)
        near = (onward > 0) & (cell >= 0) & (at[:, 0] >= 0)
        if not near.any():
            return self.cell
        cost = np.where(near, onward + 3 * np.abs(across), np.iinfo(np.int64).max)
        return int(cell[int(np.argmin(cost))])

    def on_click(self, event: events.Click) -> None:
        """Select the cell under the mouse."""
        x, y = event.x + self.scroll_offset.x, event.y + self.scroll_offset.y
        page = self.raster
        if not (0 <= y < page.height and 0 <= x < page.width):
            return
        site = int(page.site[y, x])
        if site >= 0 and int(self.work.sites.cell[site]) >= 0:
            self.post_message(self.Picked(int(self.work.sites.cell[site])))

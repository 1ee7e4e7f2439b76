"""The dashboard driven by keys: every screen opens, says what it shows, and leaves a sound piece of work."""

import asyncio
import shutil
import time

import numpy as np
import pytest

from meshctl.errors import Finding, WrongUsage
from meshctl.mesh.meshfile import lattice, write
from meshctl.picture_light import output_powers
from meshctl.screens.actions import ACTIONS, SCREENS, actions_of
from meshctl.screens.app import dashboard
from meshctl.screens.base import Ask, Base, Tell
from meshctl.screens.canvas import MeshCanvas
from meshctl.screens.curve import Curve
from meshctl.screens.matrix import MatrixView
from meshctl.screens.spectrum import POINTS
from meshctl.screens.table import ArrayTable
from meshctl.session import Session, demo_mesh_folder

SMALL = (80, 24)


@pytest.fixture
def folder(tmp_path):
    """A copy of a shipped mesh, so that tests may keep states in it."""

    def copied(name):
        return shutil.copytree(demo_mesh_folder(name), tmp_path / name)

    return copied


def driven(folder, steps, size=SMALL, coloured=True):
    """Run `steps(app, pilot)` in a dashboard without a terminal."""

    async def go():
        app = dashboard(Session(folder), coloured=coloured)
        async with app.run_test(size=size) as pilot:
            await pilot.pause()
            await steps(app, pilot)

    asyncio.run(go())


async def typed(pilot, text):
    await pilot.press(*(KEYS.get(letter, letter) for letter in text), "enter")
    await pilot.pause()


KEYS = {":": "colon", ".": "full_stop", ",": "comma", "=": "equals_sign", "_": "underscore", "/": "slash", " ": "space"}


async def rested(app, pilot, seconds=20.0):
    """Wait until no solve runs."""
    stop = time.monotonic() + seconds
    while app.job:
        assert time.monotonic() < stop, app.job
        await pilot.pause(0.02)
    await pilot.pause()


def frame(app):
    """The lines on show, as text."""
    canvas = app.screen.query_one(MeshCanvas)
    return ["".join(segment.text for segment in canvas.render_line(y)) for y in range(canvas.size.height)]


@pytest.mark.parametrize("mesh", ["plover8", "curlew", "dunlin", "knot16"])
def test_all_screens_open_in_small_windows(mesh):
    async def steps(app, pilot):
        for k, name in enumerate(SCREENS):
            await pilot.press(str(k + 1))
            await pilot.pause()
            assert app.current_mode == name
            assert name == app.screen.WHERE
            header = str(app.screen.query_one(".header").content)
            assert header.startswith(mesh)
            assert header.endswith("no bench")
            assert len(header) <= SMALL[0]
            assert str(app.screen.query_one(".keys").content).rstrip().endswith("? help")

    driven(demo_mesh_folder(mesh), steps)


@pytest.mark.parametrize("shape", ["triangular", "tree", "benes", "square", "trigrid", "hexagonal"])
def test_every_lattice_is_drawn_and_walked(shape, tmp_path):
    size = {"rows": 2, "columns": 3} if shape in ("square", "trigrid") else {"rings": 2} if shape == "hexagonal" else {}
    mesh = lattice(shape, **(size or {"modes": 8}))

    async def steps(app, pilot):
        canvas = app.screen.query_one(MeshCanvas)
        drawn = set(canvas.raster.site[canvas.raster.site >= 0].tolist())
        cells = app.work.sites.cell
        assert {int(cells[s]) for s in drawn if cells[s] >= 0} == set(range(mesh.net.n_cells))
        for zoom in ("minus", "plus", "plus"):
            await pilot.press(zoom)
            await pilot.press("down")
            assert any(line.strip() for line in frame(app))

    driven(write(mesh, tmp_path / "m"), steps)


def test_arrows_reach_all_the_cells():
    async def steps(app, pilot):  # noqa: ARG001
        canvas = app.screen.query_one(MeshCanvas)
        seen, todo = {0}, [0]
        while todo:
            canvas.cell = todo.pop()
            for way in ((1, 0), (-1, 0), (0, 1), (0, -1)):
                cell = canvas.neighbour(*way)
                if cell not in seen:
                    seen.add(cell)
                    todo.append(cell)
        assert seen == set(range(app.work.mesh.net.n_cells))

    for mesh in ("plover8", "curlew"):
        driven(demo_mesh_folder(mesh), steps)


def test_space_sets_cross_and_undo_bar():
    async def steps(app, pilot):
        await pilot.press("right", "space")
        power = app.work.cross_power(app.cell)
        assert power < 0.02 or power > 0.98
        await pilot.press("space")
        assert abs(app.work.cross_power(app.cell) - power) > 0.96
        await pilot.press("u", "u")
        assert not app.work.done
        await pilot.press("U", "U")
        assert len(app.work.done) == 2

    driven(demo_mesh_folder("plover8"), steps)


def test_states_differ_by_glyph_without_colour():
    async def steps(app, pilot):
        work, canvas = app.work, app.screen.query_one(MeshCanvas)
        for cell, share in ((0, 0.0), (1, 1.0), (2, 0.37)):
            work.set_cell(cell, share)
        work.break_cell(3)
        await pilot.pause()
        shown = frame(app)
        marks = []
        for cell in range(4):
            y, x = canvas.raster.at[np.flatnonzero(work.sites.cell == cell)[0]]
            marks.append(shown[y][x - 1 : x + 2])
        assert marks == [" ═ ", " ╳ ", "37 ", " ! "]

    driven(demo_mesh_folder("plover8"), steps, coloured=False)


def test_strokes_show_where_the_light_is():
    async def steps(app, pilot):
        for cell in range(app.work.mesh.net.n_cells):
            app.work.set_cell(cell, 0.0)
        await pilot.press("right_square_bracket", "right_square_bracket")
        await pilot.pause()
        lit = [line for line in frame(app) if line.count("━") > 10]
        assert [line.split()[0] for line in lit] == ["in3"]
        assert int(np.argmax(output_powers(app.work.mesh.net, app.work.lit))) == 2

    driven(demo_mesh_folder("plover8"), steps)


def test_light_keeps_to_rows_of_switches():
    async def steps(app, pilot):  # noqa: ARG001
        app.work.open_state("through")
        lit = [line for line in frame(app) if "in1" in line]
        assert "━━━━━━" in lit[0].split("╲")[0]  # bar: in its row up to the waveguide crossing

    driven(demo_mesh_folder("dunlin"), steps)


def test_clicks_choose_the_cell_below():
    async def steps(app, pilot):
        canvas = app.screen.query_one(MeshCanvas)
        y, x = canvas.raster.at[np.flatnonzero(app.work.sites.cell == 9)[0]]
        await pilot.click(MeshCanvas, offset=(int(x), int(y)))
        await pilot.pause()
        assert app.cell == 9
        assert app.work.mesh.net.names.cells[9] in str(app.screen.query_one(".words").content)

    driven(demo_mesh_folder("plover8"), steps)


def test_from_target_to_plan_by_keys(folder, tmp_path):
    async def steps(app, pilot):
        await pilot.press("s")
        await typed(pilot, "haar:7")
        await rested(app, pilot)
        assert app.work.measures["fidelity"] > 0.999
        await pilot.press("a")
        await rested(app, pilot)
        await pilot.press("e")
        await pilot.pause()
        assert "why not closer" in "\n".join(app.screen.lines)
        await pilot.press("escape", "w")
        await pilot.pause()
        app.screen.query_one("Input").value = str(tmp_path / "plan.json")
        await pilot.press("enter")
        await pilot.pause()
        assert Session(demo_mesh_folder("plover8")).open_plan(tmp_path / "plan.json").target["source"] == "haar:7"

    driven(folder("plover8"), steps)


def test_routes_state_fault_reroute_by_keys(folder):
    async def steps(app, pilot):
        await pilot.press("r")
        await typed(pilot, "p1:p13 p7:p24")
        await rested(app, pilot)
        first = app.work.state.plan
        assert len(first.routes) == 2, app.remark
        await pilot.press("k")
        await typed(pilot, "two")
        assert "two" in [row.name for row in app.work.session.states()]

        def arriving():
            net, matrix = app.work.mesh.net, app.work.matrix
            route = first.routes[0]
            return abs(matrix[net.outputs.index(route["output"]), net.inputs.index(route["input"])]) ** 2

        before = arriving()
        crossed = _crossed(first.routes[0])
        driven_cell = crossed[1]  # at rest all are bar; the first joins the port itself
        app.cell = app.work.mesh.net.names.cell_row[driven_cell]
        await pilot.press("f")
        await pilot.pause()
        assert arriving() < 0.1 < 0.5 < before
        await pilot.press("r")
        await typed(pilot, "p1:p13 p7:p24")
        await rested(app, pilot)
        again = app.work.state.plan
        assert again is not first, app.remark
        assert len(again.routes) == 2
        assert driven_cell not in _crossed(again.routes[0])
        assert arriving() > 0.5

    driven(folder("curlew"), steps)


def _crossed(route):
    return [cell for cell, state in zip(route["cells"], route["states"], strict=True) if state == "cross"]


def test_escape_stops_a_solve_at_once():
    async def steps(app, pilot):
        state = app.work.state
        app.start("waiting", lambda effort: _wait(effort))
        await pilot.pause()
        assert "waiting" in str(app.screen.query_one(".words").content)
        begun = time.monotonic()
        await pilot.press("escape")
        assert time.monotonic() - begun < 0.5
        assert not app.job
        await pilot.pause(0.1)
        assert app.work.state is state

    def _wait(effort):
        while not effort.cancel():
            time.sleep(0.005)
        raise WrongUsage("too late to be shown")

    driven(demo_mesh_folder("plover8"), steps)


def test_outputs_off_fires_from_everywhere():
    async def steps(app, pilot):
        heard = []
        app.action_off = lambda: heard.append(type(app.screen).__name__)
        app.start("waiting", lambda effort: _wait(effort))
        await pilot.press("ctrl+o")
        await pilot.press("question_mark", "ctrl+o", "escape")
        await pilot.press("s", "ctrl+o", "escape")
        await pilot.press("ctrl+p")
        await pilot.pause()
        await pilot.press("ctrl+o", "escape")
        await pilot.pause()
        assert heard == ["MeshScreen", "Tell", "Ask", "CommandPalette"]
        app.action_cancel()

    def _wait(effort):
        effort_ended = time.monotonic() + 20.0
        while not effort.cancel() and time.monotonic() < effort_ended:
            time.sleep(0.005)
        raise WrongUsage("ended")

    driven(demo_mesh_folder("plover8"), steps)


def test_findings_are_told_not_raised():
    async def steps(app, pilot):
        await pilot.press("s")
        await typed(pilot, "nonsense")
        await rested(app, pilot)
        assert "nonsense" in str(app.screen.query_one(".words").content)
        await pilot.press("v")
        await typed(pilot, "2")
        assert "not from 0 to 1" in app.remark
        assert not app.work.done

    driven(demo_mesh_folder("plover8"), steps)


def test_drive_table_sorts_and_filters():
    async def steps(app, pilot):
        await pilot.press("3")
        await pilot.pause()
        table = app.screen.query_one(ArrayTable)
        await pilot.press("greater_than_sign", "greater_than_sign", "less_than_sign")
        assert (np.diff(table.data[1][table.order]) <= 0).all()
        await pilot.press("slash")
        await typed(pilot, "c3_2")
        assert [str(table.data[0][k]) for k in sorted(table.order)] == ["c3_2.outer", "c3_2.inner"]
        await pilot.press("enter")
        await pilot.pause()
        assert app.current_mode == "mesh"
        assert app.work.mesh.net.names.cells[app.cell] == "c3_2"

    driven(demo_mesh_folder("plover8"), steps)


def test_matrix_panels_show_what_they_say():
    async def steps(app, pilot):
        app.work.open_state("through")
        await pilot.press("2")
        await pilot.pause()
        view = app.screen.query_one(MatrixView)
        assert np.allclose(10 ** (view.values / 10), np.abs(app.work.matrix) ** 2)
        await pilot.press("t")
        assert view.values is None  # routes ask for no matrix
        app.work.take(app.work.solve("permutation:2,1,4,3", _effort()))
        assert view.values.round(6).max() == 0.0
        await pilot.press("t")
        sums = 100.0 * ((np.abs(app.work.matrix) ** 2).sum(axis=0) - 1.0)  # a permutation sends all of each input on
        assert np.allclose(view.values.sum(axis=0), sums)

    def _effort():
        from meshctl.plan.pipeline import Effort

        return Effort(seconds=1.0)

    driven(demo_mesh_folder("dunlin"), steps)


def test_states_are_stepped_through_by_key():
    async def steps(app, pilot):
        await pilot.press("4")
        await pilot.pause()
        names = [row.name for row in app.screen.rows]
        assert len(names) == 7
        await pilot.press("n", "n")
        assert app.screen.table.row == 2
        assert app.work.state.plan.target["source"] == app.screen.rows[2].target
        await pilot.press("p", "d")
        await pilot.pause()
        assert isinstance(app.screen, Tell)

    driven(demo_mesh_folder("dunlin"), steps)


def test_spectrum_at_centre_is_the_matrix():
    async def steps(app, pilot):
        app.work.toggle_cell(5)
        await pilot.press("5")
        await _found(app, pilot)
        first = app.screen.pair
        assert app.screen.found.power[POINTS // 2, 0] == pytest.approx(_power(app.work, first), rel=1e-9)
        await pilot.press("down", "minus", "right_square_bracket")
        await _found(app, pilot)
        assert app.screen.pair[0] != first[0]
        assert app.screen.pair[1] != first[1]
        assert app.screen.found.power[POINTS // 2, 0] == pytest.approx(_power(app.work, app.screen.pair), rel=1e-9)
        assert np.ptp(app.screen.found.wavelengths_nm) == pytest.approx(20.0)
        assert "highest" in str(app.screen.query_one(".words").content)

    def _power(work, pair):
        net = work.mesh.net
        return abs(work.matrix[net.outputs.index(pair[1]), net.inputs.index(pair[0])]) ** 2

    async def _found(app, pilot):
        stop = time.monotonic() + 20.0
        await pilot.pause()
        while app.screen.found is None:
            assert time.monotonic() < stop
            await pilot.pause(0.02)

    driven(demo_mesh_folder("curlew"), steps)


def test_curves_put_dots_where_points_lie():
    curve = Curve()
    curve.y = np.array([0.0, -40.0, -20.0, -20.0])
    page = curve._dots(2, 10, 0.0, -40.0)
    assert page[0, 0] & 0x01  # the first point is the highest dot of the first column
    assert page[9, 0] & 0x80  # the second is the lowest of the next
    assert not page[9, 1] & 0x80  # the last two lie half way up
    assert page[5, 1] & 0x08
    assert (page[:, 0] > 0).all()  # and they are joined


def test_routes_are_wished_and_found_by_keys():
    async def steps(app, pilot):
        await pilot.press("6", "down", "down", "enter", "right", "enter", "g")
        await rested(app, pilot)
        assert app.screen.wished == ["in1:out3", "in2:out3"]
        assert "cannot go together" in str(app.screen.query_one(".words").content)
        assert app.work.state.plan is None
        await pilot.press("backspace", "g")
        await rested(app, pilot)
        assert [(r["input"], r["output"]) for r in app.work.state.plan.routes] == [("in1", "out3")]
        assert app.screen.query_one(ArrayTable).data[0].tolist() == ["in1:out3"]

    driven(demo_mesh_folder("plover8"), steps)


def test_tiny_windows_say_what_they_need():
    async def steps(app, pilot):
        assert "needs 60 by 16" in str(app.screen.query_one(".small").content)
        await pilot.resize_terminal(80, 24)
        await pilot.pause()
        assert not app.screen.has_class("tiny")
        assert any(line.strip() for line in frame(app))

    driven(demo_mesh_folder("plover8"), steps, size=(40, 10))


def test_help_and_palette_hold_each_action():
    async def steps(app, pilot):
        for name in SCREENS:
            app.action_go(name)
            await pilot.pause()
            said = [command.title.lower() for command in app.get_system_commands(app.screen)]
            assert said == [a.words.lower() for a in (*actions_of(name), *actions_of(""))]
            app.action_help()
            await pilot.pause()
            shown = "\n".join(app.screen.lines)
            assert all(a.words in shown for a in (*actions_of(name), *actions_of("")))
            await pilot.press("escape")
            await pilot.pause()

    driven(demo_mesh_folder("plover8"), steps)


def test_keys_of_one_screen_never_clash():
    for name in SCREENS:
        keys = [k for a in (*actions_of(name), *actions_of("")) for k in a.keys.split(",")]
        assert len(keys) == len(set(keys)), name
    assert {a.where for a in ACTIONS} <= {"", *SCREENS}


@pytest.mark.parametrize(("mesh", "screen"), [*(("plover8", k) for k in range(len(SCREENS))), ("curlew", 0)])
def test_random_keys_and_clicks_raise_nothing(mesh, screen):
    keys = [*sorted({k for a in ACTIONS for k in a.keys.split(",")} - {"q", "ctrl+o"}), "enter", "tab", "7"]

    async def steps(app, pilot):
        rng = np.random.default_rng(100 + screen)
        await pilot.press(str(screen + 1))
        for _ in range(20):
            if rng.random() < 0.2:
                await pilot.click(offset=(int(rng.integers(80)), int(rng.integers(24))))
            else:
                await pilot.press(str(rng.choice(keys)))
            if isinstance(app.screen, Ask):
                await pilot.press("escape")
            assert isinstance(app.screen, Base | Ask | Tell)
            assert not isinstance(app.work.drive, Finding)
            assert 0 <= app.cell < app.work.mesh.net.n_cells
        app.action_cancel()

    driven(demo_mesh_folder(mesh), steps)


def test_dashboard_without_terminal_says_why(run, monkeypatch):
    monkeypatch.setenv("TERM", "dumb")
    code, out, err = run("dashboard", demo_mesh_folder("plover8"))
    assert code == 2
    assert out == ""
    assert "meshctl dashboard: the dashboard needs a terminal" in err
    assert "meshctl show" in err

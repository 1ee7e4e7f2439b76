"""Light over wavelength: grids, group delay, features of filters, and what is written of them."""

import csv
import json
import subprocess
import sys

import numpy as np
import pytest
from by_hand import ring_settings, write_plan

from meshctl.errors import WrongUsage
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.response import Response
from meshctl.optics.features import feature_of
from meshctl.optics.grid import wavelengths_of
from meshctl.units import thz_from_nm

C_UM_THZ = 299.792458  # speed of light, SI
N_GROUP = 4.2


# ---- grids
def test_channels_follow_the_itu_grid():
    channels = wavelengths_of("itu:100:-10:30")
    # ITU-T G.694.1: 193.1 THz + n x 100 GHz; its table of wavelengths (from memory): 192.1 THz is 1560.61 nm,
    # 193.1 THz 1552.52 nm, 196.1 THz 1528.77 nm
    assert len(channels) == 41
    assert channels[[0, 10, 40]].round(2).tolist() == [1560.61, 1552.52, 1528.77]
    assert thz_from_nm(wavelengths_of("itu:12.5:-2:3")) == pytest.approx(193.1 + 0.0125 * np.arange(-2, 4), abs=1e-12)
    assert thz_from_nm(wavelengths_of("itu:50:-20:20")) == pytest.approx(193.1 + 0.05 * np.arange(-20, 21), abs=1e-12)


def test_ranges_go_in_nm_or_thz():
    assert np.array_equal(wavelengths_of("1540:1560:5"), [1540, 1545, 1550, 1555, 1560])
    assert np.array_equal(wavelengths_of("1540:1560:5nm"), wavelengths_of("1540:1560:5"))
    assert thz_from_nm(wavelengths_of("192:194:5thz")) == pytest.approx([192, 192.5, 193, 193.5, 194], abs=1e-12)
    assert np.array_equal(wavelengths_of("192:194:5THz"), wavelengths_of("192:194:5thz"))


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ("1540:1560", "is no range; write FROM:TO:COUNT in nm"),
        ("1540:1560:2.5", "is no range"),
        ("1540:1560:0thz", "is no range"),
        ("192:194:5", "reaches 192 nm; stay within 200 to 20000 nm; frequencies need 'thz'"),
        ("1540:1560:5thz", "reaches 194.67 nm"),
        ("itu:30:0:4", "a spacing of 30 GHz is in no channel plan; use 12.5, 25, 50 or a multiple of 100 GHz"),
        ("itu:50:4:0", "channels 4 to 0 are no rising whole numbers"),
        ("itu:50:0.5:3", "channels 0.5 to 3 are no rising whole numbers"),
        ("itu:50:0", "is no range"),
        ("1540:1560:5000000", "1 to 1000000 of them"),
    ],
)
def test_wrong_ranges_are_refused(words, said):
    with pytest.raises(WrongUsage) as caught:
        wavelengths_of(words)
    assert said in str(caught.value)


# ---- features of known functions
def airy(reflectivity, range_thz, offset=0.01):
    """Power of a lossless cavity and its derivative: 1 / (1 + F sin^2 x), x = pi (f - offset) / range."""
    strength = 4 * reflectivity / (1 - reflectivity) ** 2

    def light(thz):
        x = np.pi * (thz - offset) / range_thz
        below = 1 + strength * np.sin(x) ** 2
        return 1 / below, -strength * np.sin(2 * x) * np.pi / range_thz / below**2

    return light, strength


@pytest.mark.parametrize("reflectivity", [0.5, 0.9, 0.99])
def test_airy_peaks_have_their_finesse(reflectivity):
    light, strength = airy(reflectivity, 0.05)
    found = feature_of(light, np.linspace(193.0, 193.4, 4001))
    # Airy: full width at half power 2 asin(1 / sqrt F) / pi of the range; textbook finesse pi sqrt F / 2 beyond it
    width = 2 * np.arcsin(1 / np.sqrt(strength)) / np.pi
    assert found.kind == "peak"
    assert found.free_spectral_range_ghz == pytest.approx(50, rel=1e-9)
    assert found.bandwidth_ghz == pytest.approx(50 * width, rel=1e-8)
    assert found.finesse == pytest.approx(1 / width, rel=1e-8)
    assert found.extinction_db == pytest.approx(10 * np.log10(1 + strength), abs=1e-3)
    assert np.array(found.thz) == pytest.approx(193.01 + 0.05 * np.arange(8), abs=1e-10)


def test_dips_are_found_and_chosen():
    light, _ = airy(0.9, 0.05)
    upside = lambda f: (1 - light(f)[0], -light(f)[1])  # noqa: E731
    thz = np.linspace(193.0, 193.2, 2001)
    assert feature_of(upside, thz).kind == "dip"
    assert feature_of(upside, thz).thz == pytest.approx(feature_of(light, thz).thz, abs=1e-12)
    assert feature_of(upside, thz, "peak").free_spectral_range_ghz == pytest.approx(50, rel=1e-6)


def test_ripple_is_no_feature():
    light, _ = airy(0.9, 0.05)

    def rippled(thz):
        power, slope = light(thz)
        turn = 2 * np.pi * thz / 0.007
        return power + 0.02 * np.sin(turn), slope + 0.02 * np.cos(turn) * 2 * np.pi / 0.007

    found = feature_of(rippled, np.linspace(193.0, 193.2, 4001))
    # four peaks of the cavity, none of the 28 of the ripple
    assert len(found.thz) == 4


def test_narrow_features_are_said_to_be():
    light, _ = airy(0.99, 0.05)
    assert feature_of(light, np.linspace(193.0, 193.4, 4001)).narrow is False
    assert feature_of(light, np.linspace(193.0, 193.4, 102)).narrow is True


def test_flat_and_single_features_are_honest():
    light, _ = airy(0.9, 0.05)
    assert feature_of(lambda f: (np.ones_like(f), np.zeros_like(f)), np.linspace(193.0, 193.4, 50)) is None
    nearly = lambda f: (1 + 1e-3 * light(f)[0], 1e-3 * light(f)[1])  # noqa: E731, 0.004 dB
    assert feature_of(nearly, np.linspace(193.0, 193.4, 501)) is None
    alone = feature_of(light, np.linspace(193.0, 193.03, 500))
    assert len(alone.thz) == 1
    assert np.isnan(alone.free_spectral_range_ghz)
    assert np.isnan(alone.finesse)
    assert alone.bandwidth_ghz > 0


# ---- group delay
def delay_ps(response, settings, waves):
    field, slope = response.slope_per_nm(settings, waves)
    per_thz = slope * (-waves / thz_from_nm(waves))[:, None, None]
    with np.errstate(invalid="ignore"):
        return (field.conj() * per_thz).imag / np.abs(field) ** 2 / (2 * np.pi)


def test_straight_lanes_delay_by_their_length(chip, lattice_toml):
    guide = "[guide]\nn_eff = 2.44\nn_group = 4.2\n"
    mesh = load(chip(lattice_toml(modes=4, more=guide)))
    settings = np.zeros(mesh.net.n_settings)
    found = delay_ps(Response(mesh.net, mesh.as_built), settings, np.linspace(1530, 1570, 5))
    # all phases zero: n_g L / c with L = 4 columns of 400 um, positive, the same at all wavelengths
    lit = np.isfinite(found)
    assert lit.any()
    assert found[lit] == pytest.approx(N_GROUP * 1600 / C_UM_THZ, rel=1e-9)


def test_all_pass_ring_delays_by_its_build_up():
    mesh = lattice("hexagonal", rings=2, cell="gap")
    settings, cells, outer = ring_settings(mesh, extra_rad=0.5)
    assert len(cells) == 6
    ends = [mesh.net.inputs.index(name) for name in outer]
    response = Response(mesh.net, mesh.as_built)
    trip = N_GROUP * 1500 / C_UM_THZ
    # six bar couplers at pi turn the field by (-1)^6; at the centre the round trip is in phase: resonance.
    # all-pass ring (Yariv 2000, from memory): delay (1 + t) / (1 - t) round trips, and the bus itself one side
    t = np.cos(0.5)
    found = delay_ps(response, settings, np.array([1550.0]))[0, ends[1], ends[0]]
    assert found == pytest.approx(trip * (1 + t) / (1 - t) + N_GROUP * 250 / C_UM_THZ, rel=1e-9)


def test_delay_agrees_with_phase_differences():
    mesh = load("meshes/curlew")
    settings = np.random.default_rng(5).uniform(0, 6, mesh.net.n_settings)
    response, step = Response(mesh.net, mesh.as_built), 1e-5
    waves = np.array([1549.2, 1550.3])
    turn = np.angle(response.matrix(settings, waves + step) / response.matrix(settings, waves - step))
    thz = thz_from_nm(waves + step) - thz_from_nm(waves - step)
    numeric = turn / (2 * np.pi * thz[:, None, None])
    lit = np.abs(response.matrix(settings, waves)) > 1e-3
    # central differences: rounding 1e-16 / 1e-3 over a step of 1e-6 THz
    assert delay_ps(response, settings, waves)[lit] == pytest.approx(
        numeric[lit], abs=2e-4 * np.abs(numeric[lit]).max()
    )


# ---- a ring set by hand, through the command
@pytest.fixture(scope="module")
def ring(tmp_path_factory):
    mesh = load("meshes/curlew")
    wanted, cells, outer = ring_settings(mesh)
    path = tmp_path_factory.mktemp("ring") / "ring.json"
    plan = write_plan(mesh, wanted, path)
    return mesh, plan, path, cells, outer


def ring_angles(mesh, plan, cells):
    row, setting = mesh.net.names.element_row, mesh.net.setting_of
    couplers = [plan.actual[setting[row[f"{c}.coupler"]]] for c in cells]
    phases = [plan.actual[setting[row[f"{c}.common1"]]] for c in cells]
    return np.array(couplers), np.array(phases)


def test_ring_shows_its_free_spectral_range(run, ring):
    mesh, plan, path, cells, outer = ring
    words = ("--wavelengths", "1548:1552:2001", "--feature", ":".join(outer), "--json")
    code, said, remarks = run("predict", "meshes/curlew", path, *words)
    found = json.loads(said)
    assert (code, remarks) == (0, "")
    assert (len(cells), mesh.name) == (6, "curlew")
    couplers, phases = ring_angles(mesh, plan, cells)
    # c / (n_g L), L six sides; a phase that scales as l0 / l is as long as p l0 / 2 pi without dispersion
    length = N_GROUP * 6 * 250 + phases.sum() * 1.55 / (2 * np.pi)
    assert found["feature"]["kind"] == "dip"
    assert len(found["feature"]["thz"]) >= 10
    assert found["feature"]["free_spectral_range_ghz"] == pytest.approx(1e3 * C_UM_THZ / length, rel=1e-6)
    assert found["residual"] <= 1e-12
    # all-pass ring: (t^2 + a^2 - 2 t a cos p) / (1 + t^2 a^2 - 2 t a cos p); width half-way from floor to crest
    own = next(k for k, c in enumerate(cells) if abs(couplers[k] - np.pi) > 0.1)
    t = abs(np.cos(couplers[own]))
    a = 10 ** (-(6 * 0.02 + 0.15) / 20) * abs(np.prod(np.cos(np.delete(couplers, own))))
    low, high = ((t - a) / (1 - t * a)) ** 2, ((t + a) / (1 + t * a)) ** 2
    level = 0.5 * (low + high)
    x = (level * (1 + t * t * a * a) - t * t - a * a) / (2 * t * a * (level - 1))
    assert found["feature"]["finesse"] == pytest.approx(np.pi / np.arccos(x), rel=1e-3)
    assert found["feature"]["extinction_db"] == pytest.approx(10 * np.log10(high / low), abs=0.01)


def test_ring_of_settings_is_exact(ring):
    mesh = ring[0]
    settings, _, outer = ring_settings(mesh, phase_rad=0.0)
    into, out = (mesh.net.inputs.index(name) for name in outer)
    response = Response(mesh.net, mesh.as_built)

    def light(thz):
        waves = 299792.458 / thz
        field, slope = response.slope_per_nm(settings, waves, np.array([into]), np.array([out]))
        return np.abs(field[:, 0, 0]) ** 2, 2 * (field.conj() * slope)[:, 0, 0].real * -waves / thz

    found = feature_of(light, np.linspace(193.2, 193.7, 2001))
    # c / (n_g L) with no phase in the way
    assert found.free_spectral_range_ghz == pytest.approx(1e3 * C_UM_THZ / (N_GROUP * 1500), rel=1e-9)


def test_feature_prints_for_people(run, ring):
    words = ("--wavelengths", "193.2:193.7:1001thz", "--feature", f"{':'.join(ring[4])}:dip")
    code, said, _ = run("predict", "meshes/curlew", ring[2], *words)
    assert code == 0
    assert "free range    47." in said
    for word in ("dips", "bandwidth", "extinction", "finesse", "residual"):
        assert word in said


def test_spectrum_rows_hold_all_columns(run, ring, tmp_path):
    mesh, plan, path, _, outer = ring
    words = ("--wavelengths", "itu:50:0:2", "--between", ":".join(outer), "-o", tmp_path / "s.csv", "--json")
    assert run("predict", "meshes/curlew", path, *words)[0] == 0
    with (tmp_path / "s.csv").open(newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert [float(r["frequency_thz"]) for r in rows] == pytest.approx([193.1, 193.15, 193.2], abs=1e-12)
    assert {(r["input"], r["output"]) for r in rows} == {tuple(outer)}
    into, out = (mesh.net.inputs.index(name) for name in outer)
    waves = np.array([float(r["wavelength_nm"]) for r in rows])
    field = Response(mesh.net, mesh.as_built).matrix(plan.actual, waves)[:, out, into]
    read = np.array([float(r["amplitude"]) * np.exp(1j * float(r["phase_rad"])) for r in rows])
    assert np.abs(read - field).max() < 1e-12
    assert [float(r["power"]) for r in rows] == pytest.approx(np.abs(field) ** 2, rel=1e-12)
    assert [float(r["power_db"]) for r in rows] == pytest.approx(20 * np.log10(np.abs(field)), abs=1e-6)
    expected = delay_ps(Response(mesh.net, mesh.as_built), plan.actual, waves)[:, out, into]
    assert [float(r["group_delay_ps"]) for r in rows] == pytest.approx(expected, rel=1e-9)


def test_one_pair_of_a_loop_free_mesh(run, chip, lattice_toml, tmp_path):
    folder = chip(lattice_toml(modes=4, more="[guide]\nn_eff = 2.44\nn_group = 4.2\n"))
    assert run("solve", folder, "haar:3", "-o", tmp_path / "p.json")[0] == 0
    words = ("--wavelengths", "1549:1551:3", "-o", tmp_path / "s.csv")
    found = []
    for between in ((), ("--between", "in2:out3")):
        assert run("predict", folder, tmp_path / "p.json", *words, *between)[0] == 0
        with (tmp_path / "s.csv").open(newline="") as lines:
            found.append([r for r in csv.DictReader(lines) if (r["input"], r["output"]) == ("in2", "out3")])
    assert found[0] == found[1]
    assert len(found[0]) == 3


def test_figure_is_a_picture(run, ring, tmp_path):
    pair = ":".join(ring[4])
    words = ("--wavelengths", "1549:1551:201", "--feature", pair, "--figure", tmp_path / "ring.png")
    assert run("predict", "meshes/curlew", ring[2], *words)[0] == 0
    picture = (tmp_path / "ring.png").read_bytes()
    assert picture[:8] == b"\x89PNG\r\n\x1a\n"  # PNG signature, RFC 2083
    assert len(picture) > 10_000


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("--feature", "p1:p2"), 2, "--feature and --figure need --wavelengths"),
        (("--wavelengths", "1549:1551:9", "--feature", "p1:p99"), 2, "--feature p1:p99: output 'p99' is not known"),
        (("--wavelengths", "1549:1551:9", "--between", "q1:p2"), 2, "--between q1:p2: input 'q1' is not known"),
        (("--wavelengths", "1550:1550.001:3", "--feature", "p1:p2"), 4, "shows no peak or dip between 1550 and 1550"),
        (("--wavelengths", "1549:1551:9", "--figure", "a.jpg"), 2, "'a.jpg' is no .png or .svg or .pdf file"),
        (("--wavelengths", "1549:1551:9", "--figure", "a.png"), 2, "1296 port pairs cannot be read; 12 at most"),
    ],
)
def test_wrong_words_for_spectra(run, ring, words, code, said):
    ended, _, remarks = run("predict", "meshes/curlew", ring[2], *words)
    assert ended == code
    assert said in remarks


def test_predict_loads_no_matplotlib(ring):
    code = (
        "import sys\nfrom meshctl.cli import main\n"
        f"main(['predict', 'meshes/curlew', {str(ring[2])!r}])\n"
        "print(*sorted({m.split('.')[0] for m in sys.modules}))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert not {"matplotlib", "skrf", "jax", "networkx"} & set(done.stdout.split())


def test_loop_free_start_loads_no_scattering(tmp_path):
    code = (
        "import sys\nfrom meshctl.cli import main\n"
        f"main(['solve', 'meshes/plover8', 'haar:1', '--no-refine', '-o', {str(tmp_path / 'p.json')!r}])\n"
        "print('LOADED', *sorted(m for m in sys.modules if m.startswith('meshctl.')))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    names = set(done.stdout.split("LOADED")[1].split())
    assert "meshctl.optics.feedforward" in names
    assert not names & {"meshctl.mesh.waves", "meshctl.optics.scattering", "meshctl.optics.adjoint", "meshctl.plots"}

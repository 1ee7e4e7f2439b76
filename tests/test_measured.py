"""Parts measured or computed by others: Touchstone and CSV files in a mesh, and what is refused of them."""

import json
import sys

import numpy as np
import pytest

from meshctl.mesh.meshfile import load, write
from meshctl.mesh.response import Response
from meshctl.units import nm_from_thz, thz_from_nm

THZ = np.linspace(192.0, 195.0, 61)
GUIDE_UM, N_GROUP = 30.0, 4.2
HEAD = 'format = 1\nname = "m"\nwavelength_nm = 1550.0\n'


def touchstone(path, s, thz=THZ):
    """Write [F, n, n] of a file's own convention as Touchstone version 1, real and imaginary parts.

    Touchstone 1.1: `# Hz S RI R 50`; two ports on one line as S11 S21 S12 S22, more ports row by row.
    """
    n, lines = s.shape[1], ["# Hz S RI R 50"]
    for f, m in zip(thz, s, strict=True):
        rows = [m.T.ravel()] if n == 2 else list(m)
        numbers = [" ".join(f"{v.real:.15e} {v.imag:.15e}" for v in row) for row in rows]
        lines.append(f"{f * 1e12:.9e} " + "\n".join(numbers))
    path.write_text("\n".join(lines) + "\n")


def coupler(thz, angle=0.7, ours=True):
    """A coupler with some length in every port, b1 = cos, b2 = i sin; the other convention is its conjugate."""
    turn = np.exp(2j * np.pi * thz * N_GROUP * GUIDE_UM * 1e-6 / 299.792458e-6)
    block = np.array([[np.cos(angle), 1j * np.sin(angle)], [1j * np.sin(angle), np.cos(angle)]])
    s = np.zeros((len(thz), 4, 4), complex)
    s[:, 2:, :2] = 0.99 * turn[:, None, None] * block
    s[:, :2, 2:] = s[:, 2:, :2].swapaxes(1, 2)
    return s if ours else s.conj()


def cavity(thz, r=0.4, ours=True):
    """A lossless symmetric reflector with a length before it on both sides."""
    turn = np.exp(2j * np.pi * thz * N_GROUP * GUIDE_UM * 1e-6 / 299.792458e-6)
    s = np.array([[1j * r, np.sqrt(1 - r * r)], [np.sqrt(1 - r * r), 1j * r]]) * turn[:, None, None]
    return s if ours else s.conj()


def four(folder_writer, file, part='{file = "FILE"}', name="chip"):
    toml = (
        f'{HEAD}inputs = ["i1", "i2"]\noutputs = ["o1", "o2"]\nelements = [["k", "measured", {part}]]\n'
        'links = ["i1 k.a1", "i2 k.a2", "k.b1 o1", "k.b2 o2"]\n'
    ).replace("FILE", file)
    return folder_writer(toml, name=name)


def two(folder_writer, file, part='{file = "FILE"}', name="chip", more=""):
    toml = (
        f'{HEAD}inputs = ["i1"]\noutputs = ["o1"]\nelements = [["k", "measured", {part}]]\n'
        f'links = ["i1 k.a", "k.b o1"]\n{more}'
    ).replace("FILE", file)
    return folder_writer(toml, name=name)


def matrix(folder, waves):
    mesh = load(folder)
    return Response(mesh.net, mesh.as_built).matrix(np.zeros(0), np.asarray(waves))


# ---- reading
def test_touchstone_coupler_is_conjugated(chip):
    folder = four(chip, "k.s4p")
    touchstone(folder / "k.s4p", coupler(THZ, ours=False))
    found = matrix(folder, nm_from_thz(THZ[1:-1]))
    # at measured points exactly what the file says, in our time convention
    assert np.abs(found - coupler(THZ[1:-1])[:, 2:, :2]).max() < 1e-12


def test_files_may_keep_our_convention(chip):
    folder = four(chip, "k.s4p", '{file = "FILE", time = "exp(-iwt)"}')
    touchstone(folder / "k.s4p", coupler(THZ))
    assert np.abs(matrix(folder, nm_from_thz(THZ[5:8])) - coupler(THZ[5:8])[:, 2:, :2]).max() < 1e-12


def test_ports_of_a_file_are_named(chip):
    folder = four(chip, "k.s4p", '{file = "FILE", ports = ["b2", "a1", "b1", "a2"]}')
    order = [3, 0, 2, 1]  # which of a1, a2, b1, b2 each port of the file is
    touchstone(folder / "k.s4p", coupler(THZ, ours=False)[:, order][:, :, order])
    assert np.abs(matrix(folder, nm_from_thz(THZ[5:8])) - coupler(THZ[5:8])[:, 2:, :2]).max() < 1e-12


def test_check_says_what_was_conjugated(run, chip):
    folder = four(chip, "k.s4p")
    touchstone(folder / "k.s4p", coupler(THZ, ours=False))
    code, said, _ = run("check", folder)
    assert code == 0
    assert "k: k.s4p (conjugated: it follows exp(+jwt))" in said
    assert "1 measured" in said


def csv_rows(thz, s, names):
    rows = [["wavelength_nm", "out", "in", "amplitude", "phase_rad"]]
    for f, m in zip(thz, s, strict=True):
        for o, out in enumerate(names):
            for i, into in enumerate(names):
                if o >= i and abs(m[o, i]) > 0:  # one way is enough: parts are reciprocal
                    rows.append([nm_from_thz(f), out, into, abs(m[o, i]), np.angle(m[o, i])])
    return rows


def test_csv_and_touchstone_say_the_same(chip):
    a = four(chip, "k.s4p", name="a")
    touchstone(a / "k.s4p", coupler(THZ, ours=False))
    b = four(chip, "k.csv", '{file = "FILE", ports = ["a1", "a2", "b1", "b2"]}', name="b")
    with (b / "k.csv").open("w") as out:
        out.writelines(",".join(map(str, row)) + "\n" for row in csv_rows(THZ, coupler(THZ), ["a1", "a2", "b1", "b2"]))
    waves = np.linspace(1540, 1558, 50)
    assert np.abs(matrix(a, waves) - matrix(b, waves)).max() < 1e-12


def test_magnitude_and_phase_are_interpolated(chip):
    folder = four(chip, "k.s4p")
    coarse = THZ[::4]  # 0.2 THz: the phase steps by 0.53 rad
    touchstone(folder / "k.s4p", coupler(coarse, ours=False), coarse)
    between = 0.5 * (coarse[1:] + coarse[:-1])
    found = matrix(folder, nm_from_thz(between))
    # a constant magnitude and a straight phase are met exactly; straight lines in the plane would be off by 0.03
    assert np.abs(found - coupler(between)[:, 2:, :2]).max() < 1e-11


def test_measured_part_delays_by_its_length(chip):
    folder = two(chip, "k.s2p")
    touchstone(folder / "k.s2p", cavity(THZ, r=0.0, ours=False))
    mesh = load(folder)
    waves = np.linspace(1542, 1556, 5)
    field, slope = Response(mesh.net, mesh.as_built).slope_per_nm(np.zeros(0), waves)
    per_thz = slope * (-waves / thz_from_nm(waves))[:, None, None]
    delay_ps = (field.conj() * per_thz).imag / np.abs(field) ** 2 / (2 * np.pi)
    # n_g L / c, positive in our time convention
    assert delay_ps == pytest.approx(N_GROUP * GUIDE_UM * 1e-6 / 299.792458e-6, rel=1e-9)


def test_measured_cavity_meets_a_mirror(chip):
    toml = (
        f'{HEAD}inputs = ["i1"]\noutputs = ["o1"]\nelements = [["k", "measured", {{file = "k.s2p"}}], '
        '["m", "mirror", {reflected_power = 0.25}]]\nlinks = ["i1 k.a", "k.b m.a", "m.b o1"]\n'
    )
    folder = chip(toml)
    touchstone(folder / "k.s2p", cavity(THZ, ours=False))
    found = matrix(folder, nm_from_thz(THZ[1:-1]))[:, 0, 0]
    s = cavity(THZ[1:-1])
    # two reflectors face to face (textbook): t1 t2 / (1 - r1 r2)
    expected = s[:, 1, 0] * np.sqrt(0.75) / (1 - s[:, 1, 1] * 0.5j)
    assert np.abs(found - expected).max() < 1e-12


def test_scikit_rf_reads_and_joins_the_same(chip):
    skrf = pytest.importorskip("skrf")
    toml = (
        f'{HEAD}inputs = ["i1"]\noutputs = ["o1"]\nelements = [["k", "measured", {{file = "k.s4p"}}], '
        '["c", "measured", {file = "c.s2p"}]]\nlinks = ["i1 k.a1", "k.b1 o1", "k.b2 c.a", "c.b k.a2"]\n'
    )
    folder = chip(toml)
    touchstone(folder / "k.s4p", coupler(THZ, ours=False))
    touchstone(folder / "c.s2p", 0.97 * cavity(THZ, ours=False))
    k, c = (skrf.Network(str(folder / name)).s for name in ("k.s4p", "c.s2p"))
    # scikit-rf 2.2 as reader and solver, in its own time convention: ports a1 a2 b1 b2 | a b
    joined = skrf.network.connect_s(k, 3, c, 0)  # left: a1 a2 b1 | b
    joined = skrf.network.innerconnect_s(joined, 1, 3)  # left: a1 b1
    found = matrix(folder, nm_from_thz(THZ[1:-1]))[:, 0, 0]
    assert np.abs(found - joined[1:-1, 1, 0].conj()).max() < 1e-10


def test_measured_files_move_with_the_mesh(chip, tmp_path):
    folder = two(chip, "data/k.s2p")
    (folder / "data").mkdir()
    touchstone(folder / "data" / "k.s2p", cavity(THZ, ours=False))
    mesh = load(folder)
    again = load(write(mesh, tmp_path / "again"))
    assert again.hash == mesh.hash
    touchstone(folder / "data" / "k.s2p", cavity(THZ, r=0.41, ours=False))
    assert load(folder).hash != mesh.hash


def test_measured_part_may_be_inserted(chip):
    toml = (
        f'{HEAD}[lattice]\nshape = "rectangular"\nmodes = 2\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\n'
        'r_ohm = 600.0\n[[insert]]\nname = "c"\nkind = "measured"\nat = "in1"\nfile = "c.s2p"\n'
    )
    folder = chip(toml)
    touchstone(folder / "c.s2p", cavity(THZ, ours=False))
    mesh = load(folder)
    settings = np.zeros(mesh.net.n_settings)
    found = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)[:, 0]) ** 2
    # it passes 1 - r^2 of what enters in1
    assert found.sum() == pytest.approx(1 - 0.4**2, abs=1e-12)


def test_nearly_reciprocal_part_is_made_so(chip):
    folder = two(chip, "k.s2p")
    s = 0.9 * cavity(THZ, r=0.0, ours=False)
    s[:, 0, 1] *= 1.0006
    touchstone(folder / "k.s2p", s)
    # the mean of both ways; 0.0005 apart is what a measurement may be
    assert np.abs(np.abs(matrix(folder, nm_from_thz(THZ[5:8]))) - 0.9 * 1.0003).max() < 1e-9


def test_measured_loss_counts_in_the_budget(run, chip):
    folder = four(chip, "k.s4p")
    touchstone(folder / "k.s4p", coupler(THZ, ours=False))
    code, said, _ = run("check", folder, "--json")
    path = json.loads(said)["paths"][0]
    assert code == 0
    # 0.99 of the field leaves by both ports together: 0.0873 dB, however it is split
    assert path["loss_db"] == {"measured": pytest.approx(-20 * np.log10(0.99), abs=1e-9)}


# ---- what is refused
def test_part_active_between_points_is_refused(run, chip):
    folder = two(chip, "k.s2p")
    # passes and returns 0.6 each, 67 degrees apart one way and then the other: passive, but not on the way from one
    # to the other, where both add up to 1.2
    apart = np.where(np.arange(len(THZ)) % 2, 1.0, -1.0) * np.deg2rad(68)
    s = 0.6 * np.array([[[np.exp(1j * a), 1], [1, np.exp(1j * a)]] for a in np.r_[apart[:2]]])
    touchstone(folder / "k.s2p", s, THZ[:2])
    refused(run, folder, "the part makes light: between points, at ", "measure at closer wavelengths")


def refused(run, folder, *said):
    code, _, remarks = run("check", folder)
    assert code == 3, remarks
    for words in said:
        assert words in remarks


def test_active_part_is_refused(run, chip):
    folder = two(chip, "k.s2p")
    s = cavity(THZ, ours=False)
    s[30] *= 1.02
    touchstone(folder / "k.s2p", s)
    refused(run, folder, "k.s2p: the part makes light: at 1549.32 nm a field grows by 1.02, allowed is 1.0001")


def test_part_that_is_not_reciprocal_is_refused(run, chip):
    folder = two(chip, "k.s2p")
    s = 0.9 * cavity(THZ, ours=False)
    s[:, 0, 1] *= 0.9
    touchstone(folder / "k.s2p", s)
    refused(run, folder, "the part is not reciprocal: at ", "differ by 0.0825, allowed is 0.001")


def test_step_of_the_phase_is_refused(run, chip):
    folder = two(chip, "k.s2p")
    coarse = THZ[::20]  # 1 THz: the phase steps by 2.64 rad
    long = np.exp(1.15j * 2 * np.pi * coarse * N_GROUP * GUIDE_UM * 1e-6 / 299.792458e-6)
    touchstone(folder / "k.s2p", np.array([[0, 0.9], [0.9, 0]]) * long.conj()[:, None, None], coarse)
    refused(run, folder, "the phase of S", "it steps by 3.04 rad or more, allowed is 2.83", "closer wavelengths")


def test_turning_back_of_the_phase_is_refused(run, chip):
    folder = two(chip, "k.s2p")
    phase = np.array([0.0, 2.0, 4.0, 2.0, 0.0])  # either -2 after +2, or on by more than pi: nobody can tell
    touchstone(folder / "k.s2p", np.array([[0, 0.9], [0.9, 0]]) * np.exp(1j * phase)[:, None, None], THZ[:5])
    refused(run, folder, "the phase of S", "cannot be followed")


def test_wrong_port_count_is_refused(run, chip):
    refusal = "the file has 2 ports; 4 are named: a1, a2, b1, b2"
    folder = four(chip, "k.s2p", '{file = "FILE", ports = ["a1", "a2", "b1", "b2"]}')
    touchstone(folder / "k.s2p", cavity(THZ, ours=False))
    refused(run, folder, refusal)


def test_wavelength_outside_the_data_is_refused(run, chip, tmp_path):
    toml = (
        f'{HEAD}[lattice]\nshape = "rectangular"\nmodes = 2\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\n'
        "r_ohm = 600.0\n"
    )
    insert = '[[insert]]\nname = "c"\nkind = "measured"\nat = "in1"\nfile = "c.s2p"\n'
    folder = chip(toml + insert)
    touchstone(folder / "c.s2p", cavity(THZ, r=0.0, ours=False))
    assert run("solve", chip(toml, name="plain"), "identity", "-o", tmp_path / "p.json")[0] == 0
    code, _, remarks = run("predict", folder, tmp_path / "p.json", "--wavelengths", "1530:1550:3", "--stale-ok")
    assert code == 3
    assert "c.s2p" in remarks
    assert "1530 nm is outside the measured 1537.4 to 1561.42 nm" in remarks
    assert "measure the part over a wider range" in remarks


@pytest.mark.parametrize(
    ("part", "said"),
    [
        ('{file = "none.s2p"}', "there is no file 'none.s2p'; put it into the mesh folder"),
        ("{}", "a measured part needs 'file'"),
        ('{file = "../k.s2p"}', "file '../k.s2p' lies outside the mesh folder"),
        ('{file = "k.csv"}', "the ports of 'k.csv' are not known"),
        ('{file = "k.s2p", ports = ["a", "c"]}', "a measured part has the ports a, b or a1, a2, b1, b2"),
        ('{file = "k.s2p", time = "+j"}', "time convention '+j' is not known"),
        ('{file = "k.s2p", loss_db = 1.0}', "key 'loss_db' is not known"),
        ('{file = "bad.s2p"}', "bad.s2p: not readable as Touchstone"),
    ],
)
def test_wrong_words_of_measured_parts(run, chip, part, said):
    folder = two(chip, "", part)
    touchstone(folder / "k.s2p", cavity(THZ, ours=False))
    (folder / "bad.s2p").write_text("no numbers here\n# at all\n")
    refused(run, folder, said)


@pytest.mark.parametrize(
    ("rows", "said"),
    [
        (["1550,b,a,0.9,0", "1551,b,a,0.9,0", "1551,b,a,0.9,0"], "line 4: 'a' to 'b' stands twice"),
        (
            ["1550,b,a,0.9,0", "1551,b,a,0.9,0", "1551,a,a,0.1,1.5"],
            "'a' to 'a' is missing at 1550 nm but given elsewhere",
        ),
        (["1550,b,a,0.9,0", "1551,b,c,0.9,0"], "line 3: port 'c' is none of a, b"),
        (["1550,b,a,0.9,0"], "the file has 1 points"),
        (["1550,b,a,nan,0", "1551,b,a,0.9,0"], "line 2: amplitude is nan"),
        (["1550,b,a,0.9,0", "1551,b,a,-0.9,0"], "line 3: amplitude is -0.9; allowed is 0 to 1000"),
    ],
)
def test_wrong_csv_files_are_refused(run, chip, rows, said):
    folder = two(chip, "k.csv", '{file = "FILE", ports = ["a", "b"]}')
    (folder / "k.csv").write_text("\n".join(["wavelength_nm,out,in,amplitude,phase_rad", *rows]) + "\n")
    refused(run, folder, said)


def test_missing_reader_is_named(run, chip, monkeypatch):
    folder = two(chip, "k.s2p")
    touchstone(folder / "k.s2p", cavity(THZ, ours=False))
    monkeypatch.setitem(sys.modules, "skrf", None)
    code, _, remarks = run("check", folder)
    assert code == 2
    assert "pip install 'meshctl[sparam]'" in remarks

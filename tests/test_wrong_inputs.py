"""Wrong inputs: one clear line each, the right exit code, no traceback, and nothing half written."""

import csv
import json
import re

import numpy as np
import pytest

from meshctl.mesh.meshfile import lattice, write

TAP = '\n[[insert]]\nname = "t"\nkind = "tap"\nat = "in1"\nmonitor = "m"\ncross_power = 0.1\n'
BAND = '[[band]]\nfrom = {}\nto = "out1"\nwavelengths_nm = {}\n{}\n'
EXPLICIT = (
    'format = 1\nname = "two"\nwavelength_nm = 1550.0\ninputs = ["i1"]\noutputs = ["o1"]\n'
    'elements = [["x", "coupler"], ["y", "phase"]]\nlinks = ["i1 x.a1", "x.b1 y.a", "y.b o1"]\n'
)


class Place:
    """A folder with a sound mesh m, a plan p.json for it, and ways to spoil both."""

    def __init__(self, folder):
        self.folder = folder
        self.toml = folder / "m" / "mesh.toml"

    def edit(self, old, new):
        text = self.toml.read_text()
        assert old in text
        self.toml.write_text(text.replace(old, new, 1))

    def table(self, name, *rows):
        with (self.folder / "m" / f"{name}.csv").open("w", newline="") as out:
            csv.writer(out).writerows(rows)

    def plan(self, **changed):
        entry = json.loads((self.folder / "p.json").read_text())
        for key, value in changed.items():
            if value is None:
                del entry[key]
            else:
                entry[key] = value(entry[key]) if callable(value) else value
        (self.folder / "p.json").write_text(json.dumps(entry))

    def explicit(self, old="", new="", text=EXPLICIT):
        assert old in text
        self.toml.write_text(text.replace(old, new, 1))

    def file(self, name, content):
        if isinstance(content, np.ndarray):
            np.save(self.folder / name, content)
        else:
            (self.folder / name).write_bytes(content if isinstance(content, bytes) else content.encode())


@pytest.fixture(scope="module")
def sound(tmp_path_factory):
    """The content of the sound folder, made once."""
    import meshctl
    from meshctl.plan.plan import plan_text

    folder = tmp_path_factory.mktemp("sound")
    mesh = lattice("rectangular", modes=4)
    write(mesh, folder / "m")
    return (folder / "m" / "mesh.toml").read_text(), plan_text(meshctl.solve(mesh, "haar:1"))


@pytest.fixture
def place(tmp_path, sound, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "m").mkdir()
    (tmp_path / "m" / "mesh.toml").write_text(sound[0])
    (tmp_path / "p.json").write_text(sound[1])
    return Place(tmp_path)


def content(folder):
    return {str(p.relative_to(folder)): p.read_bytes() if p.is_file() else None for p in folder.rglob("*")}


def ends_with_one_line(run, place, words, exit_code, *says):
    before = content(place.folder)
    code, said, remarks = run(*words.split(" "))
    assert remarks.count("\n") == 1, remarks
    assert re.match(f"meshctl( {words.split(' ')[0]})?: ", remarks)
    assert "a bug in meshctl" not in remarks
    assert "Traceback" not in remarks
    assert all(word in remarks for word in says), remarks
    assert said == ""
    assert code == exit_code
    assert content(place.folder) == before


# what is spoilt, the command, exit code, and what the line must name: file or key, value, remedy
MESH_FILES = [
    (lambda p: p.edit('name = "', 'name = ""\n#'), ["'name'", "the value is ''", "one character or more"]),
    (lambda p: p.edit('name = "', "name = 5\n#"), ["'name'", "the value is 5", "a text, such as"]),
    (lambda p: p.edit("pitch_um = [400.0, 127.0]", "pitch_um = 400.0"), ["pitch_um'", "400.0", "[400.0, 127.0]"]),
    (lambda p: p.edit('name = "', "links = ''\nname = \""), ["'links'", "the value is ''", "allowed is a list, such"]),
    (lambda p: p.edit("modes = 4", 'modes = "4"'), ["'lattice.modes'", "'4' stands where a whole number", "2 to 4096"]),
    (lambda p: p.edit("modes = 4", 'modes = 4\nbalanced = "yes"'), ["balanced'", "'yes'", "true or false"]),
    (lambda p: p.edit("bits = 16", "bits = 8.5"), ["'channel.bits'", "8.5 stands where a whole number", "1 to 32"]),
    (lambda p: p.edit("max_v = 10.0", 'max_v = "10"'), ["'channel.max_v'", "'10' stands where a number"]),
    (lambda p: p.edit('name = "', 'name = "\\u001b[31m'), ["mesh.toml", "control codes", "leave them out"]),
    (lambda p: p.edit("p2pi_mw = 24.0", "p2pi_mw = 1e-300"), ["p2pi_mw'", "1e-300", "1e-06 to 1e+06 mW"]),
    (lambda p: p.edit("p2pi_mw = 24.0", "p2pi_mw = 24.0\noffset_rad = 1e16"), ["offset_rad'", "-1e+06 to 1e+06 rad"]),
    (lambda p: p.toml.write_text(p.toml.read_text()[:300]), ["mesh.toml", "line", "mend"]),
    (lambda p: p.toml.write_bytes(b"\xff\xfe" + p.toml.read_bytes()), ["mesh.toml", "UTF-8", "save it as UTF-8"]),
    (lambda p: p.toml.unlink(), ["m: no mesh.toml", "name a mesh folder"]),
    (lambda p: p.edit("format = 1", "format = 2"), ["'format'", "format is 2", "update meshctl"]),
    (lambda p: p.edit("format = 1\n", ""), ["'format'", "missing", "add it"]),
    (lambda p: p.edit("n_group", "n_grup"), ["'guide.n_grup'", "did you mean 'n_group'", "use one of"]),
    (lambda p: p.edit("[spread]", "[spred]"), ["'spred'", "did you mean 'spread'"]),
    (lambda p: p.edit("modes = 4", "modes = 1"), ["'lattice.modes'", "1 is out of range", "allowed is 2 to 4096"]),
    (lambda p: p.edit("modes = 4", "modes = 4.5"), ["'lattice.modes'", "4.5"]),
    (lambda p: p.edit("modes = 4", "modes = true"), ["'lattice.modes'", "true stands where a whole number must"]),
    (lambda p: p.edit("modes = 4\n", ""), ["'lattice'", "needs 'modes'"]),
    (lambda p: p.edit('"rectangular"', '"round"'), ["'lattice'", "'round' is not known", "rectangular"]),
    (lambda p: p.edit('cell = "mzi"', 'cell = "ring"'), ["'lattice.cell'", "'ring'", "'mzi'"]),
    (lambda p: p.edit("1550.0", "nan"), ["'wavelength_nm'", "nan", "200"]),
    (lambda p: p.edit("1550.0", "1.55"), ["'wavelength_nm'", "1.55 is out of range", "200 to 20000 nm"]),
    (lambda p: p.edit("1550.0", '"1550 nm"'), ["'wavelength_nm'", "'1550 nm'"]),
    (lambda p: p.edit("[coupler]\nloss_db = 0.0", "[coupler]\nloss_db = -0.1"), ["'coupler.loss_db'", "-0.1", "0 to"]),
    (
        lambda p: p.edit("max_v = 10.0", "max_v = 10.0\nlimit_v = inf"),
        ["'channel.limit_v'", "inf", "write above 0 to 10000 V, or leave the key out"],
    ),
    (lambda p: p.edit("max_v = 10.0", "max_v = -1.0"), ["max_v -1 V is not above min_v 0 V", "raise max_v"]),
    (lambda p: p.edit("max_v = 10.0", 'max_v = 10.0\nground = "G9"'), ["ground 'G9' is not known"]),
    (lambda p: p.edit('law = "heater"', 'law = "heeter"'), ["'actuator.phase.law'", "did you mean 'heater'"]),
    (lambda p: p.edit('law = "heater"', 'law = "gap"'), ["'actuator.phase.law'", "moves a coupler, not a phase"]),
    (lambda p: p.edit("p2pi_mw = 24.0", "p2pi_mw = -24.0"), ["'actuator.phase.p2pi_mw'", "-24", "1e-06 to 1e+06 mW"]),
    (lambda p: p.edit("p2pi_mw = 24.0\n", ""), ["p2pi_mw is missing", "1e-06 to 1e+06 mW"]),
    (lambda p: p.edit("p2pi_mw", "p2pi_w"), ["'actuator.phase.p2pi_w'", "did you mean 'p2pi_mw'"]),
    (lambda p: p.edit("[spread]", TAP.replace("in1", "in9") + "[spread]"), ["insert", "place 'in9' is not known"]),
    (lambda p: p.table("element", ["element"]), ["table 'element.csv' is not known", "elements.csv"]),
]
TABLES = [
    ("elements", [["element", "loss_db"], ["c1_1.split1", "1_0"]], ["line 2", "'1_0', which is no number"]),
    ("elements", [["element", "error_rad"], ["c1_1.split1", "1e16"]], ["line 2", "1e16", "-1e+06 to 1e+06 rad"]),
    ("elements", [["element"], ["c1\x1b[31m"]], ["line 2", "control codes", "leave them out"]),
    ("actuators", [["actuator", "r_ohm"], ["c1_1.inner", "1e-300"]], ["line 2", "0.001 to 1e+09 ohm"]),
    ("elements", [["element", "error_rad"], ["c1_1.split1", "nan"]], ["elements.csv line 2", "error_rad is nan"]),
    ("elements", [["element", "error_rad"], ["c1_1.split1", "0,1"]], ["elements.csv line 2", "'0,1'", "no number"]),
    ("elements", [["element", "loss_db"], ["c1_1.split1", -1]], ["elements.csv line 2", "loss_db is -1", "0 to 1000"]),
    ("elements", [["element", "loss_db"], ["c1_1.splat", 1]], ["line 2", "did you mean 'c1_1.split"]),
    ("elements", [["element", "loss"], ["c1_1.split1", 1]], ["line 1", "column 'loss'", "did you mean 'loss_db'"]),
    ("elements", [["element"], ["c1_1.split1"], ["c1_1.split1"]], ["line 3", "stands twice", "keep one row"]),
    ("elements", [["element", "stuck_rad"], ["c1_1.split1", 1]], ["line 2", "which nothing moves", "error_rad"]),
    ("elements", [["element", "loss_db"], ["c1_1.split1", 1, 2]], ["line 2", "3 fields where the head has 2"]),
    ("elements", [["element", "loss_db"], ["c1_1.split1", "1\n" * 99]], ["elements.csv line", "'1 1 1", "no number"]),
    ("elements", [["loss_db"], [1]], ["line 1", "column 'element' is missing"]),
    ("elements", [], ["elements.csv", "is empty", "element"]),
    ("actuators", [["actuator"], ["c1_1.split1"]], ["line 2", "'c1_1.split1' has no setting to move"]),
    ("actuators", [["actuator", "law"], ["c1_1.inner", "table"]], ["tables.csv", "'c1_1.inner'", "no rows"]),
    ("actuators", [["actuator", "law"], ["c1_1.inner", "gap"]], ["line 2", "moves a coupler; 'c1_1.inner' is a phase"]),
    ("actuators", [["actuator", "gap_nm"], ["c1_1.inner", 5]], ["line 2", "parameter of law 'heater' 'gap_nm'"]),
    (
        "actuators",
        [["actuator", "r_ohm"], ["c1_1.inner", 0]],
        ["line 2", "'c1_1.inner': r_ohm is 0 ohm", "0.001 to 1e+09 ohm"],
    ),
    ("actuators", [["actuator", "dead"], ["c1_1.inner", "yes"]], ["line 2", "dead is 'yes'", "write 0 or 1"]),
    ("actuators", [["actuator", "element"], ["out1.phase", "c1_1.inner"]], ["two actuators", "'out1.phase'"]),
    ("channels", [["channel", "bits"], ["k7", 8]], ["channels.csv line 2", "no actuator sits on channel 'k7'"]),
    ("channels", [["channel", "bits"], ["c1_1.inner", 40]], ["line 2", "bits is 40", "1 to 32"]),
    ("channels", [["channel", "bits"], ["c1_1.inner", 7.5]], ["line 2", "bits is 7.5", "whole number"]),
    (
        "channels",
        [["channel", "limit_v"], ["c1_1.inner", "inf"]],
        ["line 2", "limit_v is inf", "leave the field empty"],
    ),
    ("tables", [["actuator", "volts_v", "value_rad"], ["q", 0, 1]], ["tables.csv line 2", "actuator 'q' is not known"]),
    ("tables", [["actuator", "volts_v", "value_rad"], ["c1_1.inner", "", 1]], ["line 2", "column 'volts_v' is empty"]),
    (
        "crosstalk",
        [["from", "to", "coefficient"], ["c1_1.inner", "c1_1.inner", 0.1]],
        ["crosstalk.csv line 2", "itself"],
    ),
    ("crosstalk", [["from", "to", "coefficient"], ["c1_1.inner", "out9", 0.1]], ["line 2", "'out9' is not known"]),
    (
        "crosstalk",
        [["from", "to", "coefficient"], *[["c1_1.inner", "c1_1.outer", 0.1]] * 2],
        ["line 3", "stands twice"],
    ),
]
NETS = [
    ('"i1"', '"i:1"', ["'inputs'", "port 'i:1' is no port name", "use none of . : = , @"]),
    ('"o1"', '"o=1"', ["'outputs'", "port 'o=1' is no port name"]),
    ('"x.b1 y.a"', '"x.b1 y.a", "x.b2 y.a"', ["'links.3'", "'x.b2 y.a' uses a port", "link it once"]),
    ('"i1 x.a1", ', "", ["'links'", "port 'i1' is linked to nothing", "add a link"]),
    ('"x.b1 y.a"', '"x.b1 z.a"', ["'links.2'", "element 'z' is not known", "use one of: x, y"]),
    ('["y", "phase"]', '["x", "phase"]', ["'elements.2'", "element 'x' stands twice", "rename one"]),
    ('outputs = ["o1"]', 'outputs = ["o1"]\ntunable = ["y"]', ["'actuator.phase'", "actuator 'y' has no law"]),
    ('["y", "phase"]', '["y", "guide", {length_um = -5}]', ["'elements.2'", "length_um is -5", "allowed is 0 to"]),
    ('links = ["i1 x.a1", "x.b1 y.a", "y.b o1"]\n', "", ["'links' is missing", "an explicit net needs both"]),
]
MEASURED = [
    ([0.0, 1.0, 2.0], [0.0, 1.0, 2.0], ["3", "4"]),  # too few rows
    ([0.0, 1.0, 2.0, 3.0], [0.0, 1.0, 0.9, 2.0], ["after 1 V", "smooth"]),  # turns back
    ([0.0, 1.0, 1.0, 3.0], [0.0, 1.0, 1.5, 2.0], ["1 V"]),  # one voltage twice
]
TARGETS = [
    ("t.npy", np.eye(5), ["t.npy", "5 x 5", "4 outputs and 4 inputs", "give a matrix of 4 x 4"]),
    ("t.npy", np.diag([1, 1, 1, np.nan]), ["t.npy", "row 4 column 4 is", "nan", "finite"]),
    ("t.npy", b"\x93NUMPY\x01\x00half", ["t.npy", "not readable", "numpy.save"]),
    ("t.npy", b"PK\x03\x04 no archive", ["t.npy", "not readable", "numpy.save"]),
    ("t.npy", np.array(["a", "b"]), ["t.npy", "not numbers", "complex array"]),
    ("t.csv", "", ["t.csv", "empty", "one row per output"]),
    ("t.csv", "1,0\n0,x\n", ["t.csv", "row 2 column 2 is 'x'", "0.5-0.2j"]),
    ("t.csv", "1,0\n0\n", ["t.csv", "row 2 has 1, row 1 has 2 cells"]),
    ("t.csv", '1,0\n0,"1\n1\n1\n', ["t.csv", "not readable as CSV", "mend"]),
    ("t.csv", b"\xff\xfe1", ["t.csv", "UTF-8"]),
    ("t.csv", "1e200,0,0,0\n0,1,0,0\n0,0,1,0\n0,0,0,1", ["t.csv", "not unitary", "inf"]),
    ("T.CSV", "1,0\n0,1\n", ["T.CSV", "2 x 2", "4 outputs"]),
    ("t.toml", BAND.format('["in1"]', [1549, 1551], "least_db = -1"), ["t.toml band 1", "from is ['in1']", "port"]),
    ("t.toml", BAND.format('"in1"', [-5, 1551], "least_db = -1"), ["t.toml", "-5 nm", "from 200 to 20000 nm"]),
    ("t.toml", BAND.format('"in1"', [1549, 1551], "least_db = 1"), ["t.toml band 1", "least_db is 1 dB", "0 or less"]),
    ("t.toml", 'matrix = "permutation:1,2"', ["t.toml", "names 2 outputs; the mesh has 4"]),
    ("t.toml", 'matrix = "permutation:1,1,2,3"', ["t.toml", "no permutation"]),
    ("t.toml", 'power = "p.txt"', ["t.toml", "power is 'p.txt'", ".csv"]),
    ("t.csv", "1" * 200_000, ["t.csv", "not readable as CSV", "mend"]),
]
PLANS = [
    (lambda p: p.file("p.json", (p.folder / "p.json").read_text()[:200]), ["p.json", "not readable", "solve again"]),
    (lambda p: p.file("p.json", ""), ["p.json", "not readable", "solve again"]),
    (lambda p: p.file("p.json", "[1, 2]"), ["p.json", "not a plan of format 1"]),
    (lambda p: (p.folder / "p.json").unlink(), ["p.json", "no such file", "'solve' wrote"]),
    (lambda p: p.plan(codes=lambda c: [70000, *c[1:]]), ["p.json", "code 70000", "'c1_1.outer'", "0 to 65535"]),
    (lambda p: p.plan(codes=lambda c: [-1, *c[1:]]), ["p.json", "code -1", "0 to 65535"]),
    (lambda p: p.plan(codes=lambda c: [1.5, *c[1:]]), ["p.json", "'codes'", "whole numbers"]),
    (lambda p: p.plan(codes=lambda c: ["7", *c[1:]]), ["p.json", "'codes'", "whole numbers"]),
    (lambda p: p.plan(codes=lambda c: c[1:]), ["p.json", "'codes' has 15 entries, the mesh 16 channels"]),
    (lambda p: p.plan(volts=lambda v: [float("nan"), *v[1:]]), ["p.json", "'volts' holds NaN"]),
    (lambda p: p.plan(settings=[[0.0]]), ["p.json", "'settings' has 2 dimensions"]),
    (lambda p: p.plan(codes=None), ["p.json", "key 'codes' is missing", "solve again"]),
    (lambda p: p.plan(colour="red"), ["p.json", "key 'colour' is not known"]),
    (lambda p: p.plan(fidelity="high"), ["p.json", "'fidelity' is 'high'"]),
    (lambda p: p.plan(target=5), ["p.json", "'target' is 5"]),
    (lambda p: p.plan(target={}), ["p.json", "'target.source' is missing", "solve again"]),
    (lambda p: p.plan(target=lambda t: {**t, "source": "haar:x"}), ["p.json", "'target'", "haar:x has no seed"]),
    (lambda p: p.plan(target=lambda t: {**t, "source": "t.npy"}), ["p.json", "'t.npy' has no matrix", "solve again"]),
    (lambda p: p.plan(target=lambda t: {**t, "free": "x"}), ["p.json", "'target.free' is 'x'", "outputs"]),
    (lambda p: p.plan(target=lambda t: {**t, "size": [5, 5]}), ["p.json", "5 outputs and 5 inputs", "has 4 and 4"]),
    (lambda p: p.plan(target=lambda t: {**t, "size": [4]}), ["p.json", "'target.size' is [4]", "two whole numbers"]),
    (lambda p: p.plan(target=lambda t: {**t, "wish": True}), ["p.json", "solve again"]),
    (lambda p: p.plan(routes=5), ["p.json", "'routes' belongs to plans for routes"]),
    (lambda p: p.plan(search={}), ["p.json", "'search' belongs to plans for routes"]),
    (lambda p: p.plan(power_error="x"), ["p.json", "'power_error' is 'x'", "null"]),
    (lambda p: p.plan(continuous={}), ["p.json", "'continuous.fidelity' is missing"]),
    (lambda p: p.plan(codes=lambda c: [float("nan"), *c[1:]]), ["p.json", "'codes'", "whole numbers"]),
    (lambda p: p.plan(codes=lambda c: [2**63, *c[1:]]), ["p.json", "'codes'", "whole numbers"]),
    (lambda p: p.plan(throughput_per_input=[1.0]), ["p.json", "'throughput_per_input' has 1 entries", "4 inputs"]),
    (lambda p: p.plan(mesh_hash=5), ["p.json", "'mesh_hash' is 5", "a text"]),
    (lambda p: p.file("p.json", "[" * 100_000), ["p.json", "nested too deep", "solve again"]),
    (lambda p: p.file("p.json", "1" * 5000), ["p.json", "not readable as JSON", "solve again"]),
    (lambda p: p.plan(mesh_hash="0" * 64), ["p.json", "(000000000000)", "--stale-ok"]),
    (lambda p: p.edit("1550.0", "1551.0"), ["p.json", "physics differs", "solve again"]),
]
WORDS = [
    ("solve m fourier", 2, ["target 'fourier' is not known", "use one of: identity, dft"]),
    ("solve m haar", 2, ["'haar'", "write haar:SEED"]),
    ("solve m haar:x", 2, ["haar:x has no seed", "haar:SEED"]),
    ("solve m permutation:1,2,2,4", 2, ["permutation:1,2,2,4 is no permutation", "from 1 to 4 once"]),
    ("solve m identity:2", 2, ["'identity' takes no ':2'", "write identity"]),
    ("solve m dft -o ", 2, ["an empty word is given"]),
    ("solve m dft --save=", 2, ["an empty word is given"]),
    ("predict m p.json --between in1:out1", 2, ["--between needs -o or --figure"]),
    ("elements m p.json -o l.txt", 2, ["'l.txt' is no .csv file"]),
    ("solve m permutation:1,2", 2, ["names 2 outputs; the mesh has 4"]),
    ("solve m none.npy", 3, ["none.npy", "no such file", "name a "]),
    ("solve nowhere dft", 3, ["nowhere", "no such folder", "meshctl new"]),
    ("solve m dft --free some", 2, ["--free", "'some'", "outputs"]),
    ("solve m dft --colour red", 2, ["--colour red", "--help"]),
    ("solve m", 2, ["TARGET", "--help"]),
    ("solve m dft -o no/such/p.json", 3, ["no/such/p.json", "make 'no/such' first"]),
    ("solve m dft -o m", 3, ["m: is a folder", "name a file"]),
    ("new rectangular m --modes 4", 3, ["m: exists already", "name a new folder"]),
    ("new rectangular no/such --modes 4", 3, ["no/such", "make 'no' first"]),
    ("new round n --modes 4", 2, ["shape 'round' is not known", "rectangular"]),
    ("new rectangular n", 2, ["needs a number of modes", "such as 8"]),
    ("new rectangular n --modes 1", 2, ["modes is 1", "2 to 4096"]),
    ("new rectangular n --modes four", 2, ["--modes", "'four' is no whole number"]),
    ("new rectangular n --modes 1_0", 2, ["--modes", "'1_0' is no whole number"]),
    ("solve m dft --seconds 1_0", 2, ["--seconds", "'1_0' is no number"]),
    ("predict m p.json --wavelengths 1_540:1560:3", 2, ["1_540:1560:3 is no range"]),
    ("new rectangular n --modes 4 --spare 999", 2, ["spare is 999", "0 to 256"]),
    ("new tree n --modes 6", 2, ["6 outputs is not binary", "such as 8"]),
    ("new switch n --modes 8", 2, ["a switch has 4 modes, not 8"]),
    ("predict m p.json --matrix a.npy -o b.txt", 2, ["'b.txt' is no .csv file", "ends in .csv"]),
    ("predict m p.json --matrix a.mat", 2, ["'a.mat' is no .npy file", "ends in .npy"]),
    ("predict m p.json --wavelengths 1550", 2, ["--wavelengths 1550", "FROM:TO:COUNT"]),
    ("predict m p.json --wavelengths nan:1560:3", 2, ["nan:1560:3", "200 to 20000 nm"]),
    ("predict m p.json --wavelengths 1540:1560:0", 2, ["1540:1560:0", "1 to 1000000"]),
    ("predict m m", 3, ["m: is a folder", "name a plan file"]),
    ("elements m p.json", 2, ["-o", "--help"]),
    ("predict m p.json --wavelengths -5:1560:5", 2, ["--wavelengths -5:1560:5 is no range", "200 to 20000 nm"]),
    ("predict m p.json --wavelengths itu:50:-99999:0", 2, ["channel -99999", "200 to 20000 nm"]),
    ("predict m p.json --wavelengths itu:50:nan:0", 2, ["itu:50:nan:0 is no range"]),
    ("show m --input in1", 2, ["--input needs a plan"]),
    ("show m p.json --input in9", 2, ["port 'in9' is not known", "in1"]),
]


def case_id(value):
    """What the line must name tells the cases apart."""
    named = isinstance(value, list) and value and all(isinstance(word, str) for word in value)
    return re.sub(r"\W+", " ", " ".join(value))[:50] if named else None


@pytest.mark.parametrize(("spoil", "says"), MESH_FILES, ids=case_id)
def test_unsound_mesh_file_is_one_line(run, place, spoil, says):
    spoil(place)
    ends_with_one_line(run, place, "check m", 3, *says)


@pytest.mark.parametrize(("name", "rows", "says"), TABLES, ids=case_id)
def test_unsound_table_is_one_line(run, place, name, rows, says):
    place.table(name, *rows)
    ends_with_one_line(run, place, "check m", 3, *says)


@pytest.mark.parametrize(("old", "new", "says"), NETS, ids=case_id)
def test_unsound_net_is_one_line(run, place, old, new, says):
    place.explicit(old, new)
    ends_with_one_line(run, place, "check m", 3, "mesh.toml", *says)


@pytest.mark.parametrize(("volts", "value", "says"), MEASURED, ids=case_id)
def test_unsound_measured_rows_are_one_line(run, place, volts, value, says):
    place.table("actuators", ["actuator", "law"], ["c1_1.inner", "table"])
    rows = [["c1_1.inner", v, x] for v, x in zip(volts, value, strict=True)]
    place.table("tables", ["actuator", "volts_v", "value_rad"], *rows)
    ends_with_one_line(run, place, "check m", 3, "tables.csv", "'c1_1.inner'", *says)


@pytest.mark.parametrize(("name", "made", "says"), TARGETS, ids=case_id)
def test_unsound_target_is_one_line(run, place, name, made, says):
    place.file(name, made)
    ends_with_one_line(run, place, f"solve m {name} -o q.json", 3, *says)


@pytest.mark.parametrize("matrix", [np.eye(4) * 0.9, np.ones((4, 4)), np.diag([1.0, 1.0, 1.0, 1.0 + 1e-7])])
def test_non_unitary_target_says_how_far(run, place, matrix):
    # today a matrix must be unitary to 1e-9; whatever is refused has to say how far it is off
    place.file("t.npy", matrix)
    gram = matrix.T @ matrix - np.eye(4)
    ends_with_one_line(
        run, place, "solve m t.npy -o q.json", 3, "t.npy", "unitary", f"{np.abs(gram).max():.3g}", "1e-09"
    )


@pytest.mark.parametrize(("spoil", "says"), PLANS, ids=case_id)
def test_unsound_plan_is_one_line(run, place, spoil, says):
    spoil(place)
    ends_with_one_line(run, place, "predict m p.json --matrix u.npy", 3, *says)
    ends_with_one_line(run, place, "elements m p.json -o l.csv", 3, *says)


@pytest.mark.parametrize(("words", "exit_code", "says"), WORDS, ids=case_id)
def test_wrong_words_are_one_line(run, place, words, exit_code, says):
    ends_with_one_line(run, place, words, exit_code, *says)


@pytest.mark.parametrize(
    ("changed", "says"),
    [
        ({"words": ["zzz"]}, ["'target'", "route 'zzz' is not complete"]),
        ({"words": ["in1:out1"], "band": "q"}, ["'target'", "band q is no range"]),
        ({"unused": "zz"}, ["'target.unused' is 'zz'", "cleanest"]),
    ],
)
def test_unsound_plan_for_routes_is_one_line(run, place, changed, says):
    assert run("route", "m", "in1:out2", "-o", "p.json")[0] == 0
    place.plan(target=lambda t: {**t, **changed})
    for words in ("show m p.json", "predict m p.json --matrix u.npy", "energy m p.json"):
        ends_with_one_line(run, place, words, 3, "p.json: ", *says, "route again" if "words" in changed else "again")


def test_route_to_port_that_is_not_there_is_one_line(run, place):
    assert run("route", "m", "in1:out2", "-o", "p.json")[0] == 0
    text = (place.folder / "p.json").read_text()
    place.file("p.json", text.replace('"out2"', '"out9"').replace("in1:out2", "in1:out9"))
    ends_with_one_line(run, place, "show m p.json", 3, "p.json: ", "in1:out9 is not on mesh", "route again")


def test_folder_in_place_of_a_state_is_one_line(run, place):
    (place.folder / "m" / "states" / "x.json").mkdir(parents=True)
    for words in ("states m x", "solve m dft --save x"):
        ends_with_one_line(run, place, words, 3, "x.json", "is a folder where a state must be", "move it away")


def test_table_with_other_letters_is_not_overlooked(run, place):
    place.file("m/Elements.CSV", "element\n")
    ends_with_one_line(run, place, "check m", 3, "table 'Elements.CSV' is not known", "elements.csv")


def test_missing_command_is_asked_for(run):
    code, said, remarks = run()
    assert (code, said) == (2, "")
    assert "name a command; 'meshctl --help' lists them" in remarks


def test_limit_below_need_is_one_line(run, place):
    place.edit("max_v = 10.0", "max_v = 10.0\nlimit_v = 1.5")
    ends_with_one_line(run, place, "solve m haar:1 -o q.json", 4, "V is needed", "1.5 V", "limit_v", "--best-effort")


def test_net_without_cells_is_no_bug(run, place):
    # one coupler and one phase, nothing to set: the answer may be a plan or a refusal, not a bug
    place.explicit()
    place.file("t.npy", np.eye(1))
    code, _, remarks = run("solve", "m", "t.npy")
    assert code in (0, 4)
    assert "bug" not in remarks


@pytest.mark.parametrize("share", np.linspace(0.02, 0.98, 25).round(2))
def test_truncated_files_never_are_bugs(run, place, share):
    # cut anywhere: refused as unsound, or (a cut between two lines of TOML) sound again; never a bug, never a crash
    for name, words in (("m/mesh.toml", "check m"), ("p.json", "predict m p.json")):
        whole = (place.folder / name).read_bytes()
        (place.folder / name).write_bytes(whole[: int(len(whole) * share)])
        code, _, remarks = run(*words.split())
        assert code in ((0, 3) if name.endswith("toml") else (3,)), remarks
        assert remarks.count("\n") == (1 if code else 0)
        (place.folder / name).write_bytes(whole)

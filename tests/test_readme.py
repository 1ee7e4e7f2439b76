"""The README's commands are run as they stand, and what it shows is what they print."""

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text()
RESULT = re.compile(r"-?\d+\.?\d*(?:e[+-]?\d+)?")


def blocks(kind):
    return re.findall(rf"^```{kind}\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)


def commands():
    """(command, shown output) of every console block."""
    found = []
    for block in blocks("console"):
        for part in re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]:
            command, _, shown = part.partition("\n")
            found.append((command, shown.strip()))
    return found


def run(command, folder):
    words = shlex.split(command)
    assert words[0] == "meshctl"
    return subprocess.run(
        [sys.executable, "-m", "meshctl", *words[1:]], cwd=folder, capture_output=True, text=True, check=False
    )


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    folder = tmp_path_factory.mktemp("readme")
    os.symlink(ROOT / "meshes", folder / "meshes")
    return folder


def test_every_readme_command_does_as_shown(bench):
    assert len(commands()) >= 10
    for command, shown in commands():
        done = run(command, bench)
        assert "Traceback" not in done.stderr
        if shown:  # only refusals are shown in console blocks
            assert done.returncode == 2, command
            assert done.stderr.strip() == shown
        else:
            assert done.returncode == 0, (command, done.stderr)


def same(shown, printed):
    """Words alike; numbers alike to 1e-3, or both below 1e-12, where they are rounding and differ by machine."""
    if RESULT.sub("#", " ".join(shown.split())) != RESULT.sub("#", " ".join(printed.split())):
        return False
    pairs = zip(RESULT.findall(shown), RESULT.findall(printed), strict=True)
    return all(
        abs(float(a) - float(b)) <= 1e-3 * abs(float(a)) or max(abs(float(a)), abs(float(b))) < 1e-12 for a, b in pairs
    )


def test_first_output_is_what_prints(bench):
    shown = blocks("")[1].strip().splitlines()
    printed = run("meshctl solve meshes/plover8 haar:7 -o plan.json", bench).stdout.strip().splitlines()
    cut = shown.index("..")
    for mine, real in zip(shown[:cut], printed, strict=False):
        assert same(mine, real), (mine, real)
    for mine, real in zip(shown[cut + 1 :], printed[cut + 1 - len(shown) :], strict=True):
        assert same(mine, real), (mine, real)


def test_readme_python_runs_as_written(bench, monkeypatch, capsys):
    monkeypatch.chdir(bench)
    (code,) = blocks("python")
    exec(compile(code, "README.md", "exec"), {})
    assert "codes" in capsys.readouterr().out


def test_install_stands_near_the_top():
    lines = README.splitlines()
    assert next(n for n, line in enumerate(lines, 1) if "pip install" in line) <= 15
    assert next(n for n, line in enumerate(lines, 1) if line.startswith("actuator  ")) <= 25

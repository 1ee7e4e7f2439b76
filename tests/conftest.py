"""Small builders that several rooms of tests share."""

import csv

import numpy as np
import pytest
from hypothesis import settings

settings.register_profile("seeded", derandomize=True, deadline=None, max_examples=30)
settings.load_profile("seeded")


def multiplied(rows, n_lanes):
    """A flat list of (kind, lane, lane or None, value) as one matrix, by plain dense products in order."""
    matrix = np.eye(n_lanes, dtype=complex)
    for kind, a, b, value in rows:
        if kind == "coupler":
            block = np.array([[np.cos(value), 1j * np.sin(value)], [1j * np.sin(value), np.cos(value)]])
            matrix[[a, b]] = block @ matrix[[a, b]]
        elif kind == "crossing":
            matrix[[a, b]] = matrix[[b, a]]
        else:
            matrix[a] *= np.exp(1j * value) if kind == "phase" else 10 ** (-value / 20)
    return matrix


@pytest.fixture
def run(capsys):
    """Run one command in process: (exit code, stdout, stderr)."""
    from meshctl.cli import main

    def command(*words):
        code = main([str(word) for word in words])
        said = capsys.readouterr()
        return code, said.out, said.err

    return command


@pytest.fixture
def chip(tmp_path):
    """Write a mesh folder: mesh.toml as text, each table as a list of rows with its head first."""

    def write(toml, name="chip", **tables):
        folder = tmp_path / name
        folder.mkdir()
        (folder / "mesh.toml").write_text(toml)
        for table, rows in tables.items():
            with (folder / f"{table}.csv").open("w", newline="") as out:
                csv.writer(out).writerows(rows)
        return folder

    return write


@pytest.fixture
def lattice_toml():
    """mesh.toml of a lattice with heaters; further lines may follow."""

    def text(shape="rectangular", modes=4, cell="mzi", lattice="", more="", channel=""):
        size = f"modes = {modes}\n" if modes else ""
        gap = (
            "gap_nm = 200.0\nstiffness_n_per_m = 2.0\narea_um2 = 20.0\ndecay_nm = 50.0\nrest_rad = 3.05\nmargin = 0.8\n"
        )
        couplers = f'[actuator.coupler]\nlaw = "gap"\n{gap}' if cell == "gap" else ""
        return (
            f'format = 1\nname = "t"\nwavelength_nm = 1550.0\n'
            f'[lattice]\nshape = "{shape}"\n{size}cell = "{cell}"\n{lattice}\n'
            f'[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n{couplers}'
            f"[channel]\nbits = 16\nmax_v = 10.0\n{channel}\n{more}\n"
        )

    return text

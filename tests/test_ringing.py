"""Loops that light hardly leaves: they are named, with what rounding may do there."""

import numpy as np
import pytest
from by_hand import ring_settings, write_plan
from loop_meshes import response

from meshctl.mesh.meshfile import MESH_TOML, lattice, load
from meshctl.mesh.ringing import ringing


@pytest.mark.parametrize("extra_rad", [0.01, 1e-4, 1e-6])
def test_ringing_loop_is_named_with_its_error(extra_rad):
    mesh = lattice("hexagonal", rings=2, cell="gap")
    settings, cells, outer = ring_settings(mesh, extra_rad=extra_rad, phase_rad=0.0)
    used, (into, out) = response(mesh), (mesh.net.inputs.index(name) for name in outer)
    through = used.matrix(settings)[out, into]
    (loop,) = ringing(used, settings, np.array([1549.0, 1550.0]))
    assert set(loop.parts) == set(cells)
    assert loop.wavelength_nm == 1550.0
    # all-pass ring on resonance without loss: the field inside is 1 / (1 - t) round trips, (t - 1) / (1 - t) leaves;
    # both signs turned by the bars
    assert loop.build_up == pytest.approx(1 / (2 * np.sin(extra_rad / 2) ** 2), rel=1e-3)
    # ten times the condition number times rounding is all that may be lost
    assert abs(through - 1) <= loop.error == 10 * loop.build_up * np.finfo(float).eps
    assert used.waves.residual <= 1e-12
    assert "c1" in str(loop)
    assert "1550.000000 nm" in str(loop)


def test_closed_loop_is_named_as_dark():
    mesh = lattice("hexagonal", rings=2, cell="gap")
    settings, cells, _ = ring_settings(mesh, extra_rad=0.0, phase_rad=0.0)
    (loop,) = ringing(response(mesh), settings)
    assert np.isinf(loop.build_up)
    assert set(loop.parts) == set(cells)
    assert "never leaves it" in str(loop)
    settings[mesh.net.setting_is_angle] = 0.7
    assert ringing(response(mesh), settings) == []


def test_predict_names_the_ringing_loop(run, tmp_path):
    run("new", "hexagonal", tmp_path / "m", "--rings", 1)
    toml = tmp_path / "m" / MESH_TOML
    toml.write_text(toml.read_text().replace("bits = 16", "bits = 24"))
    mesh = load(tmp_path / "m")
    remarks = []
    for common in (0.0, np.pi):
        settings = np.zeros(12)
        settings[::2] = np.pi  # every cell bar: the one hexagon is a closed ring, up to the codes
        settings[:2] += common
        write_plan(mesh, settings, tmp_path / "p.json")
        code, said, remark = run("predict", tmp_path / "m", tmp_path / "p.json")
        assert code == 0
        assert "residual" in said
        remarks.append(remark)
    # six bars turn the light by a whole or by half a turn: one of the two resonates
    named = ["warning: light in the loop c1, c2, c4, c6, c5, c3" in remark for remark in remarks]
    assert sorted(named) == [False, True], remarks

"""Meshes with loops for tests, plain and with parts that reflect."""

import numpy as np

from meshctl.mesh.response import Response

WAVES = np.array([1541.0, 1550.0, 1563.0])
REFLECTING = """
[[insert]]
name = "t1"
kind = "tether"
at = "c7.b1"
loss_db = 0.02
reflection_db = 25.0
[[insert]]
name = "g1"
kind = "isolation"
at = "c12.a2"
transmitted_power = 0.9
reflected_power = 0.06
[[insert]]
name = "m1"
kind = "mirror"
at = "c16.b2"
reflected_power = 0.3
[[insert]]
name = "x1"
kind = "crossing"
at = "c3.b1 c20.a1"
[[insert]]
name = "e1"
kind = "terminator"
at = "p5"
reflection_db = 14.0
reflection_rad = 0.7
"""


def loop_toml(shape="hexagonal", size="rings = 2", cell="gap", more="", loss=1.0):
    return (
        f'format = 1\nname = "loops"\nwavelength_nm = 1550.0\n[lattice]\nshape = "{shape}"\n{size}\ncell = "{cell}"\n'
        f"side_um = 200.0\n[guide]\nn_eff = 2.44\nn_group = 4.2\nloss_db_per_cm = {loss}\n"
        "[coupler]\nloss_db = 0.03\nangle_slope_per_nm = 0.002\n"
        '[actuator.coupler]\nlaw = "gap"\ngap_nm = 200.0\nstiffness_n_per_m = 2.0\narea_um2 = 20.0\ndecay_nm = 50.0\n'
        'rest_rad = 3.05\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n' + more
    )


def some(mesh, seed=0):
    return np.random.default_rng(seed).uniform(0, 2 * np.pi, mesh.net.n_settings)


def response(mesh):
    return Response(mesh.net, mesh.as_built)

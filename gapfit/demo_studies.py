"""Study files of the demo data, and the fillings that they look for."""

from __future__ import annotations

__all__ = ["CAMPION_LOOK_FOR", "CAMPION_STUDY", "HAREBELL_LOOK_FOR", "MARK", "TEASEL_STUDY", "harebell_study"]

MARK = "SYNTHETIC DATA, made by gapfit simulate; sample and readings are invented"
"""Line that marks every file as synthetic."""

HAREBELL_LOOK_FOR = ("1/3", "2/5", "3/7", "4/9", "5/9", "4/7", "3/5", "2/3", "1")
CAMPION_LOOK_FOR = ("-1/3", "1/3", "2/5", "2/3", "1", "4/3", "2")

_HAREBELL_STUDY = """\
# {mark}
[sample]
name = "{name}"
cooldown = "first"
host = "GaAs"
permittivity = 12.9
density_cm2 = {density_cm2}
mobility_cm2_per_Vs = {mobility}

[geometry]
kind = "hall-bar"
length_um = 400
width_um = 100
relative_error = 0.05

[traces]
files = ["sweeps/*.{suffix}"]
sweep = "field"
temperature = {{ column = "{temperature}", unit = "{unit}" }}
field = {{ column = "{field}", unit = "T" }}
rho_xx = {{ column = "{along}_X", unit = "V" }}
rho_xy = {{ column = "{across}_X", unit = "V" }}
quadrature = {{ column = "{along}_Y", unit = "V" }}
current_A = 1e-8
symmetrise = "auto"

[fillings]
look_for = [{fillings}]
max_denominator = 11

[thermometry]
relative_error = 0.003
scale_error = 0.01
electron_saturation = true
saturation_exponent = 4

[fit]
quantity = "auto"
mechanisms = "default"
window = "average"
noise = "student"
seed = 20260101
"""

CAMPION_STUDY = f"""\
# {MARK}
[sample]
name = "campion-1"
cooldown = "first"
host = "graphene-hBN"
permittivity = 3.8

[geometry]
kind = "hall-bar"
length_um = 4
width_um = 2
relative_error = 0.1

[traces]
files = ["sweeps/*.txt"]
sweep = "gate"
temperature = {{ from_name = "T(?P<value>[0-9p.]+)K" }}
gate = {{ column = "U_gate", unit = "V" }}
field = {{ column = "Field", unit = "T" }}
rho_xx = {{ column = "U_xx", unit = "V" }}
rho_xy = {{ column = "U_xy", unit = "V" }}
current_A = 2e-8
capacitance_F_per_m2 = 1.121e-3
neutrality_V = 0.05

[fillings]
look_for = [{", ".join(f'"{text}"' for text in CAMPION_LOOK_FOR)}]
max_denominator = 5

[thermometry]
relative_error = 0.008
scale_error = 0.01

[fit]
quantity = "auto"
mechanisms = "default"
window = "average"
noise = "student"
seed = 20260101
"""

TEASEL_STUDY = f"""\
# {MARK}
[sample]
name = "teasel-2"
cooldown = "second"
host = "GaAs"
permittivity = 12.9
density_cm2 = 1.04e11

[geometry]
kind = "resistivity"

[series]
file = "minima.csv"

[thermometry]
scale_error = 0.01

[fit]
quantity = "rho_xx"
mechanisms = "default"
window = "average"
noise = "student"
seed = 20260101
"""


def harebell_study(**keys: str) -> str:
    """Study file of a harebell.

    Parameters
    ----------
    **keys : str
        name, density_cm2, mobility, suffix, temperature, unit, field, along, across: what differs between
        the two samples.

    Returns
    -------
    str
    """
    fillings = ", ".join(f'"{text}"' for text in HAREBELL_LOOK_FOR)
    return _HAREBELL_STUDY.format(mark=MARK, fillings=fillings, **keys)

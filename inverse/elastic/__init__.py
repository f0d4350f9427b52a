"""Elasticity of crystals: stiffness tensors, their stability and averages, and the plane waves in them.

Units: GPa, g/cm3, nm and ps. With them a velocity in nm/ps (= km/s) is sqrt(modulus / density) with no
factor.
"""

from inverse.elastic.averages import Averages, averages, poisson_ratio, young_modulus
from inverse.elastic.branch_moduli import BranchModuli, branch_moduli
from inverse.elastic.christoffel import (
    BRANCHES,
    PlaneWaves,
    christoffel_matrix,
    longitudinal_velocity,
    phase_velocities,
    plane_waves,
)
from inverse.elastic.cut_properties import photoelastic_ratios, thermal_stress
from inverse.elastic.directions import (
    crystal_direction,
    direction_from_c_axis,
    rotation_about_axis,
    rotation_from_euler,
    rotation_to_z,
    unit_direction,
)
from inverse.elastic.sections import Section, plane_section
from inverse.elastic.sensitivity import Reach, constants_reached, measured_derivatives, velocity_derivatives
from inverse.elastic.stability import Criterion, born_criteria, is_stable
from inverse.elastic.symmetry import SYMMETRIES, constant_names
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import full_to_voigt, mandel_to_voigt, voigt_to_mandel

__all__ = [
    "StiffnessTensor",
    "SYMMETRIES",
    "constant_names",
    "voigt_to_mandel",
    "mandel_to_voigt",
    "full_to_voigt",
    "crystal_direction",
    "direction_from_c_axis",
    "unit_direction",
    "rotation_about_axis",
    "rotation_from_euler",
    "rotation_to_z",
    "Criterion",
    "born_criteria",
    "is_stable",
    "Averages",
    "averages",
    "young_modulus",
    "poisson_ratio",
    "BRANCHES",
    "BranchModuli",
    "branch_moduli",
    "PlaneWaves",
    "christoffel_matrix",
    "phase_velocities",
    "plane_waves",
    "longitudinal_velocity",
    "photoelastic_ratios",
    "thermal_stress",
    "Section",
    "plane_section",
    "Reach",
    "constants_reached",
    "measured_derivatives",
    "velocity_derivatives",
]

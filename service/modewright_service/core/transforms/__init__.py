"""Between fields and coefficients: projection of samples and expressions, reconstruction at points."""

from .expressions import project_expression
from .fields import Projection
from .meshes import CellMesh, Interpolation, Measure, PointMesh, Reconstruction
from .projection import ProjectionPlan, plan_projection
from .reconstruction import lump_values, reconstruct

__all__ = [
    "CellMesh",
    "Interpolation",
    "Measure",
    "PointMesh",
    "Projection",
    "ProjectionPlan",
    "Reconstruction",
    "lump_values",
    "plan_projection",
    "project_expression",
    "reconstruct",
]

"""What the readings mean: numbers in, numbers out.

Only :mod:`analyse.service` touches sockets, files or clocks. Everything named here can be used
from a script or a notebook without starting a process.
"""

from analyse.confidence import normal_mixture, t_radius
from analyse.drude import Transport, transport
from analyse.estimate import BudgetLine, Caution, Estimate, Measured, Moment
from analyse.estimator import Estimator
from analyse.hall_bar import HallBar
from analyse.lockin import LockinFilter
from analyse.materials import MATERIALS, Material
from analyse.numbers import Number
from analyse.setup import Excitation, FieldSource, Ramp, Signal, Target, Window
from analyse.square_root import Solution, SquareRootInformation

__all__ = [
    "MATERIALS",
    "BudgetLine",
    "Caution",
    "Estimate",
    "Estimator",
    "Excitation",
    "FieldSource",
    "HallBar",
    "LockinFilter",
    "Material",
    "Measured",
    "Moment",
    "Number",
    "Ramp",
    "Signal",
    "Solution",
    "SquareRootInformation",
    "Target",
    "Transport",
    "Window",
    "normal_mixture",
    "t_radius",
    "transport",
]

"""Demilune: kernels for symmetric and Hermitian matrices of which one triangle is stored.

>>> import numpy as np
>>> from demilune import kernel
>>> product = kernel("product", layout="packed", n=3, dtype="float64", language="python")
>>> half = product.to_half([[4.0, 1.0, 0.0], [1.0, 3.0, 2.0], [0.0, 2.0, 5.0]])
>>> product(half, np.array([1.0, 1.0, 1.0]))
array([5., 6., 7.])
"""

from demilune.bench.levels import Verdict, verify
from demilune.errors import CheckError, DemiluneError, InputError, MissingError, SpecError
from demilune.evidence.record import evidence_of
from demilune.kernel import Kernel, checked, kernel
from demilune.pipeline import build, check
from demilune.plan.build import Plan, make_plan
from demilune.render import pseudo_code, render
from demilune.spec import Spec, make_spec
from demilune.specfile import SpecFile, expand, parse, read, schema
from demilune.storage import to_full, to_half
from demilune.version import __version__

__all__ = [
    "CheckError",
    "DemiluneError",
    "InputError",
    "Kernel",
    "MissingError",
    "Plan",
    "Spec",
    "SpecError",
    "SpecFile",
    "Verdict",
    "__version__",
    "build",
    "check",
    "checked",
    "evidence_of",
    "expand",
    "kernel",
    "make_plan",
    "make_spec",
    "parse",
    "pseudo_code",
    "read",
    "render",
    "schema",
    "to_full",
    "to_half",
    "verify",
]

"""Aqueous equilibrium of one vessel or of a batch, with a certificate for each.

`equilibrate` and `equilibrate_batch` are the public face; `vessel.solve` is the array form that
the plant model uses. This package knows no flowsheet.
"""

from dosewright.equilibrium.answers import (
    Amounts,
    Batch,
    Certificate,
    Equilibrium,
    certify,
    equilibrate,
    equilibrate_batch,
)
from dosewright.equilibrium.vessel import States, join_states, solve

__all__ = [
    "Amounts",
    "Batch",
    "Certificate",
    "Equilibrium",
    "States",
    "certify",
    "equilibrate",
    "equilibrate_batch",
    "join_states",
    "solve",
]

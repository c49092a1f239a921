"""Chemistry: formulas, the catalogue of constants, activity models, systems of components.

Knows no solver and no flowsheet.
"""

from dosewright.chemistry.catalogue import Catalogue, catalogue

__all__ = ["Catalogue", "catalogue"]

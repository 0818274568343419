"""Ions, free and in a crystal field: terms, Landé's g, quenching, assignment.

Only the light modules are imported here, so that a look-up starts fast; the crystal-field model is
imported from its own modules.
"""

from spinfit.ion.lande import IonLevel, lande_g, lookup
from spinfit.ion.names import parse_name
from spinfit.ion.terms import hund, ls_terms

__all__ = ["IonLevel", "hund", "lande_g", "lookup", "ls_terms", "parse_name"]

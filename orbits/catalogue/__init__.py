"""Catalogues of orbits: one row per solution, in ECSV with units."""

from .entry import Entry
from .packaged import catalogue_file, find_entry, find_solutions, packaged_catalogues
from .table import Catalogue, add_entries

__all__ = [
    "Catalogue",
    "Entry",
    "add_entries",
    "catalogue_file",
    "find_entry",
    "find_solutions",
    "packaged_catalogues",
]

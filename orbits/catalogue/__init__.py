"""Catalogues of orbits: one row per solution, in ECSV with units."""

from .entry import Entry, entry_of_system
from .packaged import catalogue_file, find_entry, find_solutions, packaged_catalogues
from .table import Catalogue, add_entries

__all__ = [
    "Catalogue",
    "Entry",
    "add_entries",
    "catalogue_file",
    "entry_of_system",
    "find_entry",
    "find_solutions",
    "packaged_catalogues",
]

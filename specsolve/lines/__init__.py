"""Spectral lines: the struct of arrays that every room passes around, its reading and its identification."""

from .identify import Identification, identify, load_transitions
from .line_list import (
    FLAG_AMBIGUOUS,
    FLAG_CONFLICTING_LOG_GF,
    FLAG_NO_HYDROGEN_DATA,
    FLAG_UNIDENTIFIED,
    LineList,
    describe_flags,
)
from .reading import default_line_list, line_list_from_table, read_line_list
from .wavelengths import air_to_vacuum, vacuum_to_air

__all__ = [
    "FLAG_AMBIGUOUS",
    "FLAG_CONFLICTING_LOG_GF",
    "FLAG_NO_HYDROGEN_DATA",
    "FLAG_UNIDENTIFIED",
    "Identification",
    "LineList",
    "air_to_vacuum",
    "default_line_list",
    "describe_flags",
    "identify",
    "line_list_from_table",
    "load_transitions",
    "read_line_list",
    "vacuum_to_air",
]

"""What was measured: ring lists, their files, and the spacings they mean."""

from phaseid.rings.camera import CameraConstant, parse_camera_constant
from phaseid.rings.columns import COLUMNS, Column
from phaseid.rings.reading import (
    read_rings,
    rings_from_table,
    rings_from_text,
    rings_from_values,
    table_from_values,
)
from phaseid.rings.ringlist import GRADES, RingList
from phaseid.rings.table import RingTable, parse_table, read_text, text_of
from phaseid.rings.writing import rings_to_text, write_rings

__all__ = [
    "COLUMNS",
    "GRADES",
    "CameraConstant",
    "Column",
    "RingList",
    "RingTable",
    "parse_camera_constant",
    "parse_table",
    "read_rings",
    "read_text",
    "rings_from_table",
    "rings_from_text",
    "rings_from_values",
    "rings_to_text",
    "table_from_values",
    "text_of",
    "write_rings",
]

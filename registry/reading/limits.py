"""How large and how nested may a file be before it is refused?

One frozen dataclass holds every limit of reading, so that a hostile or broken file costs
a bounded amount of memory and time.  deflate, zip and gzip all reach a ratio of about
1,030 to 1 on honest data: the limits are absolute sizes, never ratios.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["DEFAULT_LIMITS", "ReadingLimits"]


@dataclass(frozen=True)
class ReadingLimits:
    """Limits of one reading; a field is named with its unit and reason.

    Attributes:
        array_bytes: bytes of one array in memory as declared by the file; 4 GiB is the
            largest map that a usual computer can fit at all.
        file_arrays_bytes: bytes of all arrays taken from one file together.
        text_bytes: bytes of one text after decompression; text costs about ten times
            its size in memory while it is taken apart.
        text_columns: columns of a text; more is a matrix or no table at all.
        head_lines: comment and header lines before the first row of numbers.
        json_bytes: bytes of one JSON value in a comment or an attribute.
        attribute_bytes: bytes of one HDF5 attribute (the format's own compact limit).
        npy_header_bytes: bytes of the header of a NumPy array.
        archive_members: members of an NPZ archive.
        depth: groups inside groups, links after links.
        objects: objects looked at while searching an HDF5 file for its data.
        dimensions: dimensions of a signal (HDF5 itself allows 32).
        grid_fill: greatest ratio of grid cells to samples for rows to be a map; a map
            stopped half way has 2, rows that are no grid have about as many as samples.
        grid_passes: times that one grid cell may be measured in one map.
        grid_tolerance: two axis values nearer than this part of the axis' span are one.
        faults: faults reported together, the first ones of the file.
    """

    array_bytes: int = 4 * 2**30
    file_arrays_bytes: int = 8 * 2**30
    text_bytes: int = 512 * 2**20
    text_columns: int = 4096
    head_lines: int = 10_000
    json_bytes: int = 2**20
    attribute_bytes: int = 64 * 2**10
    npy_header_bytes: int = 10_000
    archive_members: int = 10_000
    depth: int = 32
    objects: int = 100_000
    dimensions: int = 8
    grid_fill: float = 4.0
    grid_passes: int = 64
    grid_tolerance: float = 1e-6
    faults: int = 10


DEFAULT_LIMITS = ReadingLimits()

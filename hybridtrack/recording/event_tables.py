"""Read events from tables of other origin (CSV, NPZ, HDF5) in blocks, into the columns of this project.

Column names, time unit, polarity coding and pixel origin are the caller's to state: nothing is guessed from a file's
name or its first rows.
"""

import itertools
import zipfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import h5py
import hdf5plugin  # noqa: F401  registers the compression filters with h5py
import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, OptionError
from hybridtrack.recording.arrays import Array, Events

TIME_UNITS_NS = {"s": 1_000_000_000, "ms": 1_000_000, "us": 1_000, "ns": 1}
POLARITY_CODINGS = {"01": (1, 0), "+-1": (1, -1), "10": (0, 1)}
CSV_BLOCK = 1 << 18


@dataclass(frozen=True)
class EventTableOptions:
    """How to read an event table.

    `columns`: names (or, for a CSV with no header, the order) of stamp, x, y and polarity, comma separated.
    `time_unit`: s, ms, us or ns. `polarity`: "01" (1 is ON), "+-1" (+1 is ON) or "10" (0 is ON).
    `time_origin_ns` is added to every stamp after conversion; `pixel_origin` is the number of the first column and
    row; `delimiter` and `header_rows` are for CSV.
    """

    columns: tuple[str, str, str, str] = ("t", "x", "y", "p")
    time_unit: str = "us"
    polarity: str = "01"
    time_origin_ns: int = 0
    pixel_origin: int = 0
    delimiter: str = ","

    def __post_init__(self) -> None:
        if len(self.columns) != 4 or len(set(self.columns)) != 4:
            raise OptionError(f"columns: four different names (stamp, x, y, polarity) are required, got {self.columns}")
        if self.time_unit not in TIME_UNITS_NS:
            raise OptionError(f"time unit: one of {', '.join(TIME_UNITS_NS)} is required, got '{self.time_unit}'")
        if self.polarity not in POLARITY_CODINGS:
            raise OptionError(f"polarity: one of {', '.join(POLARITY_CODINGS)} is required, got '{self.polarity}'")


def decimal_text_to_ns(text: Array, unit_ns: int) -> Array:
    """Convert decimal numbers as text (N,) to int64 ns exactly, beyond what a float64 can hold.

    >>> decimal_text_to_ns(np.array(["1700000000.123456789", "-0.5"]), 1_000_000_000).tolist()
    [1700000000123456789, -500000000]
    """
    digits = len(str(unit_ns)) - 1
    if any("e" in item or "E" in item for item in text[:1]):
        return np.rint(text.astype(float) * unit_ns).astype(np.int64)
    whole, _, fraction = np.char.partition(text, ".").T
    negative = np.char.startswith(whole, "-")
    kept = np.array([item[:digits].ljust(digits, "0") or "0" for item in fraction], dtype=np.int64)
    whole_number = np.where(np.isin(whole, ("", "-", "+")), "0", whole).astype(np.int64)
    return whole_number * unit_ns + np.where(negative, -kept, kept)


def _stamps_to_ns(t: Array, options: EventTableOptions) -> Array:
    unit_ns = TIME_UNITS_NS[options.time_unit]
    if t.dtype.kind == "U":
        stamps = decimal_text_to_ns(t, unit_ns)
    elif t.dtype.kind == "f":
        if not np.all(np.isfinite(t)):
            raise FileFormatError("event stamps must be finite numbers, got a NaN or infinity")
        stamps = np.rint(t * unit_ns).astype(np.int64)
    else:
        stamps = t.astype(np.int64) * unit_ns
    return stamps + options.time_origin_ns


def _convert(t: Array, x: Array, y: Array, polarity: Array, options: EventTableOptions, source: str) -> Events:
    on_code, off_code = POLARITY_CODINGS[options.polarity]
    polarity = np.asarray(polarity).astype(np.int64)
    unknown = polarity[(polarity != on_code) & (polarity != off_code)]
    if len(unknown):
        raise FileFormatError(
            f"{source}: polarity must be {on_code} or {off_code} ('{options.polarity}'), got {unknown[0]}"
        )
    columns = []
    for name, values in (("x", x), ("y", y)):
        shifted = np.asarray(values).astype(np.int64) - options.pixel_origin
        if len(shifted) and (shifted.min() < 0 or shifted.max() > 65535):
            bad = shifted[(shifted < 0) | (shifted > 65535)][0] + options.pixel_origin
            raise FileFormatError(f"{source}: {name} must be {options.pixel_origin} or more and fit 16 bits, got {bad}")
        columns.append(shifted.astype(np.uint16))
    try:
        stamps = _stamps_to_ns(np.asarray(t), options)
    except (ValueError, FileFormatError) as error:
        raise FileFormatError(f"{source}: {error}") from None
    return Events(stamps, columns[0], columns[1], (polarity == on_code).astype(np.uint8))


def _csv_header(path: Path, options: EventTableOptions) -> tuple[list[str], int]:
    """Return the column names of a CSV and how many leading lines to skip."""
    skipped = 0
    with open(path, encoding="utf-8", errors="replace") as handle:
        for line in handle:
            text = line.strip()
            if text and not text.startswith("#"):
                break
            skipped += 1
        else:
            raise FileFormatError(f"{path}: events are required, and the file has no rows")
    cells = [cell.strip() for cell in text.split(options.delimiter)]
    if any(cell and cell[0].isalpha() for cell in cells):
        return cells, skipped + 1
    return list(options.columns), skipped


def _csv_blocks(path: Path, options: EventTableOptions) -> Iterator[Events]:
    names, skipped = _csv_header(path, options)
    missing = [name for name in options.columns if name not in names]
    if missing:
        raise FileFormatError(f"{path}: column '{missing[0]}' is required, and the header has {', '.join(names)}")
    order = [names.index(name) for name in options.columns]
    kind = np.dtype([("t", "U40"), ("x", np.int64), ("y", np.int64), ("p", np.int64)])
    with open(path, encoding="utf-8", errors="replace") as handle:
        for _ in range(skipped):
            next(handle)
        row = skipped
        while lines := list(itertools.islice(handle, CSV_BLOCK)):
            source = f"{path}, lines {row + 1} to {row + len(lines)}"
            row += len(lines)
            try:
                table = np.atleast_1d(np.loadtxt(lines, delimiter=options.delimiter, dtype=kind, usecols=order))
            except (ValueError, IndexError) as error:
                raise FileFormatError(f"{source}: four numbers a row are required ({error})") from None
            if len(table):
                yield _convert(table["t"], table["x"], table["y"], table["p"], options, source)


def _npz_blocks(path: Path, options: EventTableOptions) -> Iterator[Events]:
    try:
        with np.load(path, allow_pickle=False) as archive:
            missing = [name for name in options.columns if name not in archive]
            if missing:
                raise FileFormatError(
                    f"{path}: array '{missing[0]}' is required, and the file has {', '.join(archive.files) or 'none'}"
                )
            arrays = [archive[name] for name in options.columns]
    except (zipfile.BadZipFile, ValueError, OSError, EOFError) as error:
        if isinstance(error, FileFormatError):
            raise
        raise FileFormatError(f"{path}: expected an NPZ of plain arrays ({error})") from None
    if len({array.shape for array in arrays}) != 1 or arrays[0].ndim != 1:
        raise FileFormatError(f"{path}: event arrays must be flat and of one length, got {[a.shape for a in arrays]}")
    for start in range(0, len(arrays[0]), 1 << 20):
        t, x, y, p = (array[start : start + (1 << 20)] for array in arrays)
        yield _convert(t, x, y, p, options, str(path))


def _hdf5_blocks(path: Path, options: EventTableOptions) -> Iterator[Events]:
    try:
        handle = h5py.File(path, "r")
    except OSError:
        raise FileFormatError(f"{path}: expected an HDF5 file, and it is truncated or of another kind") from None
    with handle:
        missing = [name for name in options.columns if not isinstance(handle.get(name), h5py.Dataset)]
        if missing:
            raise FileFormatError(f"{path}: data set '{missing[0]}' is required, and is not in the file")
        data = [handle[name] for name in options.columns]
        if len({len(column) for column in data}) != 1:
            raise FileFormatError(f"{path}: event columns must have one length, got {[len(d) for d in data]}")
        for start in range(0, len(data[0]), 1 << 20):
            t, x, y, p = (column[start : start + (1 << 20)] for column in data)
            yield _convert(t, x, y, p, options, str(path))


def event_table_blocks(path: Path | str, options: EventTableOptions) -> Iterator[Events]:
    """Yield the events of a CSV (`.csv`, `.txt`), NPZ or HDF5 (`.h5`, `.hdf5`) table in blocks, in the file's order.

    Raises MissingFileError or FileFormatError with the rows, the requirement and the value received.
    """
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a table of events, found no such file")
    readers = {
        ".csv": _csv_blocks,
        ".txt": _csv_blocks,
        ".npz": _npz_blocks,
        ".h5": _hdf5_blocks,
        ".hdf5": _hdf5_blocks,
    }
    if file.suffix.lower() not in readers:
        raise OptionError(f"{file}: an event table ending in {', '.join(readers)} is required, got '{file.suffix}'")
    return readers[file.suffix.lower()](file, options)


def in_stamp_order(blocks: Iterator[Events], reorder_ns: int) -> Iterator[Events]:
    """Put events into stamp order where none is more than `reorder_ns` late.

    A stable sort: events of one stamp keep the file's order. Raises FileFormatError at an event later than that.
    """
    held, released_until = Events.empty(), np.iinfo(np.int64).min
    for block in itertools.chain(blocks, [None]):
        if block is not None:
            held = Events.joined([held, block])
            if len(held) and held.t[1:].size and np.any(held.t[1:] < held.t[:-1]):
                held = held[np.argsort(held.t, kind="stable")]
        if not len(held):
            continue
        if held.t[0] < released_until:
            late_ms = (released_until - int(held.t[0])) / 1e6
            raise FileFormatError(
                f"event stamps may be at most {reorder_ns / 1e6:g} ms out of order, "
                f"got one {late_ms + reorder_ns / 1e6:.3f} ms late"
            )
        last = int(held.t[-1])
        cut = len(held) if block is None else int(np.searchsorted(held.t, last - reorder_ns))
        if cut:
            released_until = int(held.t[cut - 1])
            yield held[:cut]
            held = held[cut:]

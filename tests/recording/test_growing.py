"""A recording that another process still appends to."""

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError
from hybridtrack.recording import Recording

# Column y is behind the others, and so are the pictures: the reader sees what all columns have.
WRITER = """
import sys, h5py, numpy as np
out = h5py.File(sys.argv[1], "w", libver="latest")
out.attrs.update({"format": "hybridtrack-recording", "version": 1})
kinds = {"t": np.int64, "x": np.uint16, "y": np.uint16, "on": np.uint8}
columns = {n: out.create_dataset(f"events/{n}", (0,), k, maxshape=(None,), chunks=True) for n, k in kinds.items()}
image = out.create_dataset("frames/image", (0, 4, 6), np.uint8, maxshape=(None, 4, 6), chunks=True)
stamps = {n: out.create_dataset(f"frames/{n}", (0,), np.int64, maxshape=(None,), chunks=True)
          for n in ("t_start", "exposure")}
out.swmr_mode = True
def grow(to):
    for name, data in columns.items():
        end = to - 5 if name == "y" else to
        data.resize((end,))
        data[:] = np.arange(end)
        data.flush()
    for data in (*stamps.values(), image):
        end = to // 10 - (1 if data is image else 0)
        data.resize(end, axis=0)
        data[:] = 7
        data.flush()
for line in sys.stdin:
    grow(int(line))
    print("grown", flush=True)
"""


@pytest.fixture
def writer(tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    """A process that appends what it is told to."""
    process = subprocess.Popen(
        [sys.executable, "-c", WRITER, tmp_path / "growing.h5"],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    )  # fmt: skip
    yield process
    process.communicate(timeout=20)


def tell(process: subprocess.Popen[str], count: int) -> None:
    """Have so many events written."""
    assert process.stdin is not None
    assert process.stdout is not None
    process.stdin.write(f"{count}\n")
    process.stdin.flush()
    assert process.stdout.readline() == "grown\n"


def test_what_is_there_can_be_read_while_it_grows(writer: subprocess.Popen[str], tmp_path: Path) -> None:
    """Each opening sees what all columns have by then, and no more; without `growing` the file is refused."""
    for count in (100, 250):
        tell(writer, count)
        with Recording.open(tmp_path / "growing.h5", growing=True) as recording:
            assert recording.event_count == count - 5
            np.testing.assert_array_equal(recording.events().t, np.arange(count - 5))
            assert len(recording.frames) == count // 10 - 1
            assert recording.frame_image(count // 10 - 2).max() == 7
    with pytest.raises(FileFormatError, match="expected an HDF5 recording"):
        Recording.open(tmp_path / "growing.h5")

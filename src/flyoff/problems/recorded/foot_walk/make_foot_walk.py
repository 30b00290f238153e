"""Make ``foot_walk.npz`` from the source distribution archive of gaitmap 2.6.0.

Usage: ``python make_foot_walk.py gaitmap-2.6.0.tar.gz [foot_walk.npz]``

The members are stored uncompressed and with fixed zip headers, so that the bytes depend neither
on the zlib build, nor on the clock, nor on the operating system.
"""

from __future__ import annotations

import csv
import hashlib
import io
import sys
import tarfile
import zipfile
from pathlib import Path

import numpy as np

#: Archive members that are read, with the sha256 of their content.
MEMBERS = {
    "gaitmap-2.6.0/example_data/imu_sample_not_rotated.csv": (
        "5136b5c7e086997d4a7423d9320a7abf2c8e467821920387157620959f427311"
    ),
    "gaitmap-2.6.0/example_data/mocap_sample.csv": (
        "e27e89a75b38cb53520385eb252786c951a74a8f4a3d252322330ab672f6c00e"
    ),
}

FEET = ("left", "right")
AXES = ("x", "y", "z")
MARKERS = ("FCC", "TOE", "FM5")  # heel, toe, fifth metatarsal head
IMU_RATE_HZ = 204.8
MARKER_RATE_HZ = 100.0


def read_members(archive: Path) -> list[list[list[str]]]:
    """Return the rows of each member in the order of `MEMBERS`.

    Raises ValueError if a member does not have the expected content.
    """
    tables = []
    with tarfile.open(archive, "r:gz") as tar:
        for name, expected in MEMBERS.items():
            handle = tar.extractfile(name)
            if handle is None:
                raise ValueError(f"{name} is not a regular file in {archive.name}")
            content = handle.read()
            found = hashlib.sha256(content).hexdigest()
            if found != expected:
                raise ValueError(f"{name} has sha256 {found}, expected {expected}")
            tables.append(list(csv.reader(io.StringIO(content.decode("utf-8")))))
    return tables


def columns(table: list[list[str]], first_row: int) -> dict[tuple[str, str], np.ndarray]:
    """Return {(group, axis): values (rows,)} of a table with two header rows.

    An empty cell becomes NaN (a missing marker).
    """
    group, axis = table[0], table[1]
    rows = np.array(
        [[float(cell) if cell else np.nan for cell in row[1:]] for row in table[first_row:]]
    )
    index = [int(row[0]) for row in table[first_row:]]
    if index != list(range(len(index))):
        raise ValueError("the row numbers are not 0, 1, 2, ...: a sample is missing")
    return {(group[j + 1], axis[j + 1]): rows[:, j] for j in range(rows.shape[1])}


def build(archive: Path) -> dict[str, np.ndarray]:
    """Return the arrays that go into the data file, in the units of the source."""
    imu_table, marker_table = read_members(archive)
    # The IMU table has its two header rows and data at once, the marker table likewise.
    imu = columns(imu_table, 2)
    markers = columns(marker_table, 2)
    force = np.stack(
        [np.stack([imu[f"{foot}_sensor", f"acc_{a}"] for a in AXES], 1) for foot in FEET], 2
    )
    rate = np.stack(
        [np.stack([imu[f"{foot}_sensor", f"gyr_{a}"] for a in AXES], 1) for foot in FEET], 2
    )
    points = np.stack(
        [
            np.stack(
                [
                    np.stack([markers[f"{foot[0].upper()}_{name}", a] for a in AXES], 1)
                    for name in MARKERS
                ],
                1,
            )
            for foot in FEET
        ],
        3,
    )
    if not np.array_equal(points.astype("<f4").astype(float), points, equal_nan=True):
        raise ValueError("the marker positions are not exactly representable as float32")
    return {
        "imu_rate_hz": np.array(IMU_RATE_HZ, dtype="<f8"),
        "marker_rate_hz": np.array(MARKER_RATE_HZ, dtype="<f8"),
        "specific_force_m_s2": force.astype("<f4"),
        "rate_deg_s": rate.astype("<f4"),
        "markers_mm": points.astype("<f4"),
    }


def write_npz(path: Path, arrays: dict[str, np.ndarray]) -> str:
    """Write the arrays with reproducible bytes and return the sha256 of the file."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_STORED) as out:
        for name, array in arrays.items():
            member = io.BytesIO()
            np.lib.format.write_array(
                member, np.asarray(array, order="C"), version=(1, 0), allow_pickle=False
            )
            info = zipfile.ZipInfo(f"{name}.npy", date_time=(1980, 1, 1, 0, 0, 0))
            info.create_system = 3
            info.external_attr = 0o644 << 16
            out.writestr(info, member.getvalue())
    path.write_bytes(buffer.getvalue())
    return hashlib.sha256(buffer.getvalue()).hexdigest()


def main(arguments: list[str]) -> int:
    """Run the command; return the exit status."""
    if len(arguments) not in (1, 2):
        print(__doc__, file=sys.stderr)
        return 2
    archive = Path(arguments[0])
    if len(arguments) == 2:
        target = Path(arguments[1])
    else:
        target = Path(__file__).with_name("foot_walk.npz")
    try:
        digest = write_npz(target, build(archive))
    except (OSError, KeyError, ValueError, tarfile.TarError) as error:
        print(f"make_foot_walk: {error}", file=sys.stderr)
        return 1
    print(f"{digest}  {target.name}  {target.stat().st_size} bytes")
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))

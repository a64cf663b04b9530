"""Every place where bytes of strangers come in: each takes bytes and may raise PhaseidError alone.

Each target has seeds, well-formed input to damage. Shared by the tests here and by scripts/fuzz.
"""

from __future__ import annotations

import gzip
import io
import struct
import tarfile
import tempfile
import zipfile
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import NamedTuple

import numpy as np
from PIL import Image

from phaseid.errors import InputError, PhaseidError

ROOT = Path(__file__).resolve().parents[2]
TESTS = ROOT / "tests"


class Target(NamedTuple):
    """What takes the bytes, and what to begin with."""

    take: Callable[[bytes], object]
    seeds: tuple[bytes, ...]
    examples: int  # in the tests; a run of scripts/fuzz goes on as long as it is told


def _cif(data: bytes) -> None:
    from phaseid.crystal.cif import read_cif
    from phaseid.library.entries import entry

    reading = read_cif(data, "fuzz.cif")
    assert reading.crystals or reading.rejects
    for crystal in reading.crystals[:2]:
        if len(crystal.sites) < 50:
            assert entry(crystal, "fuzz").content


def _rings(data: bytes) -> None:
    from phaseid.rings import parse_table, rings_from_table, rings_to_text, text_of

    table = parse_table(text_of(data, "fuzz.csv"), "fuzz.csv")
    for probe in (None, "electron 200 kV", "x-ray Cu Ka"):
        with suppress(InputError):
            rings = rings_from_table(table, probe=probe)
            assert (rings.sigma_A > 0).all()
            assert np.isfinite(rings.d_A).all()
            assert "# probe" in rings_to_text(rings)


def _in_file(name: str, take: Callable[[Path], object]) -> Callable[[bytes], None]:
    def run(data: bytes) -> None:
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / name
            path.write_bytes(data)
            take(path)

    return run


def _image(path: Path) -> None:
    from phaseid.rings.measuring import is_image, read_image
    from phaseid.rings.measuring.telling import is_profile

    is_image(path)
    is_profile(path)
    assert read_image(path)


def _profile(path: Path) -> None:
    from phaseid.rings.measuring import measure_profile

    found = measure_profile(path, probe="x-ray Cu Ka")
    with suppress(InputError):
        found.ring_list()


def _config(path: Path) -> None:
    from phaseid.cli.settings import read_config

    held = read_config(path)
    assert all(isinstance(value, str) for value in held.values())


def _calibration(path: Path) -> None:
    from phaseid.rings import table_from_values
    from phaseid.rings.calibration_record import load_calibration

    record = load_calibration(path.stem, path.parent)
    assert record.describe()
    for column in ("d_A", "two_theta_deg", "radius_mm", "radius_px"):
        with suppress(InputError):
            record.apply(table_from_values(["20.5", "30.1"], column=column))


def _archive(path: Path) -> None:
    from phaseid.library.sources import count_structure_files, read_all

    count_structure_files([path])
    assert list(read_all([path]))


def _probe(data: bytes) -> None:
    from phaseid.matching.chemistry import Chemistry
    from phaseid.probes import parse_probe, parse_relative
    from phaseid.rings import parse_camera_constant

    text = data.decode("utf-8", "surrogateescape")
    for parse in (parse_probe, parse_relative, parse_camera_constant):
        with suppress(PhaseidError):
            parse(text)
    for given in ((text, None, None), (None, text, None), (None, None, text)):
        with suppress(PhaseidError):
            Chemistry.parse(*given)


def _saved(image: Image.Image, kind: str) -> bytes:
    stream = io.BytesIO()
    image.save(stream, kind)
    return stream.getvalue()


def _images() -> tuple[bytes, ...]:
    y, x = np.mgrid[:40, :40]
    counts = (200 * np.exp(-((np.hypot(x - 20, y - 20) - 12) ** 2) / 4) + x).astype(np.uint8)
    picture = Image.fromarray(counts)
    kinds = [_saved(picture, kind) for kind in ("TIFF", "PNG", "BMP", "GIF", "JPEG")]
    mrc = struct.pack("<4i", 40, 40, 1, 0) + bytes(192) + b"MAP DD\0\0" + bytes(808)
    array = io.BytesIO()
    np.save(array, counts)
    return (*kinds, mrc[:1024] + counts.tobytes(), array.getvalue())


def _archives() -> tuple[bytes, ...]:
    cif = (TESTS / "cif" / "identity_only.cif").read_bytes()
    packed = io.BytesIO()
    with zipfile.ZipFile(packed, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a.cif", cif)
        archive.writestr("b/c.cif.gz", gzip.compress(cif))
    rolled = io.BytesIO()
    with tarfile.open(fileobj=rolled, mode="w:gz") as tar:
        info = tarfile.TarInfo("a.cif")
        info.size = len(cif)
        tar.addfile(info, io.BytesIO(cif))
    plain = gzip.decompress(rolled.getvalue())
    return packed.getvalue(), rolled.getvalue(), plain


def _files(folder: Path, pattern: str) -> tuple[bytes, ...]:
    return tuple(path.read_bytes() for path in sorted(folder.rglob(pattern)))


def _scan() -> bytes:
    """Two peaks of 0.2° on a flat background, with the scatter of counts."""
    angle = np.arange(20.0, 32.0, 0.04)
    peaks = sum(np.exp(-(((angle - at) / 0.1) ** 2) / 2) for at in (23.0, 28.0))
    counts = np.random.default_rng(1).poisson(50 + 900 * peaks)
    rows = "\n".join(f"{a:.2f},{c}" for a, c in zip(angle, counts, strict=True))
    return f"two_theta_deg,counts\n{rows}\n".encode()


_POWDER = b"data_x\n_diffrn_radiation_wavelength 1.54\nloop_\n_pd_meas_2theta_scan\n" + (
    b"_pd_meas_counts_total\n" + b"".join(b"%.2f %d\n" % (20 + n / 20, 90 + n) for n in range(60))
)
_SETTINGS = b'probe = "electron 200 kV"\nlibrary = "mine.sqlite"\nmust = "Al,O"\n'


def _records() -> tuple[bytes, ...]:
    """A record of each kind, with whatever fields this version adds."""
    import json
    from dataclasses import asdict, replace

    from phaseid.rings.calibration_record import SCHEMA, CalibrationRecord

    one = CalibrationRecord(
        name="x", created="2024-05-01", standard="Au", cell_source="", probe="electron 200 kV",
        wavelength_A=0.0251, quantity="radius", relative_sigma=0.001, camera_constant=25.1,
        plate_unit="mm",
    )  # fmt: skip
    angles = replace(
        one, probe="x-ray Cu Ka", wavelength_A=1.54, quantity="two_theta", camera_constant=None
    )
    return tuple(
        json.dumps({"schema": SCHEMA, "records": [asdict(record)]}).encode()
        for record in (one, angles, replace(one, quantity="d", camera_constant=None))
    )


TARGETS: dict[str, Target] = {
    "cif": Target(_cif, _files(TESTS / "cif", "*.cif") + _files(TESTS / "bad", "*.cif"), 120),
    "rings": Target(
        _rings, _files(TESTS / "bad", "*.csv") + _files(ROOT / "data" / "demo", "*.csv"), 200
    ),
    "image": Target(_in_file("fuzz.dat", _image), _images(), 120),
    "profile": Target(_in_file("fuzz.xy", _profile), (_scan(), _POWDER), 40),
    "config": Target(_in_file("config.toml", _config), (_SETTINGS,), 100),
    "calibration": Target(_in_file("x.json", _calibration), _records(), 120),
    "zip": Target(_in_file("fuzz.zip", _archive), _archives(), 80),
    "tar": Target(_in_file("fuzz.tar.gz", _archive), _archives(), 80),
    "probe": Target(
        _probe, (b"electron 200 kV", b"x-ray Cu Ka1", b"25.1 +- 0.3 A mm", b"1 %", b"Al,O"), 200
    ),
}

GRAFTS = (
    b"", b"0", b"-1", b"nan", b"inf", b"1e999", b"9" * 400, b"\x00", b"\xff\xfe", b"\xc3", b"\n",
    b"\r", b'"', b"'", b";\n", b"#", b"[" * 3000, b"{" * 3000, b"null", b"true", b"1e-320",
    b"\xe2\x80\xae", b"\x1b[2J", b"=1+1", b"\x7f\xff\xff\xff", b"\x80\x00\x00\x00",
)  # fmt: skip

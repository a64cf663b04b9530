"""Folders and archives that mean harm: bombs, traversal, links, pipes, nesting, odd names.

None of them may cost more than bounded time and memory, write anything, or stop the next file.
"""

from __future__ import annotations

import bz2
import gzip
import inspect
import io
import lzma
import os
import struct
import subprocess
import sys
import tarfile
import time
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path

import pytest

from phaseid.crystal.cif_text import MAX_BYTES
from phaseid.library import Library, sources, unpacking
from phaseid.library.sources import StructureFile, count_structure_files, read_all
from phaseid.library.tally import Rejected
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]
MEGABYTE = 1 << 20
GOOD = rock_salt("MgO").encode()


def _read(*paths: Path) -> tuple[list[StructureFile], dict[str, Rejected]]:
    found = list(read_all(paths))
    files = [one for one in found if isinstance(one, StructureFile)]
    rejects = {one.file: one for one in found if isinstance(one, Rejected)}
    total = count_structure_files(paths)
    assert total is None or total == len(found)
    return files, rejects


def _tar(path: Path, members: list[tuple[tarfile.TarInfo, bytes]], mode: str = "w:gz") -> Path:
    with tarfile.open(path, mode) as archive:  # type: ignore[call-overload]
        for info, data in members:
            info.size = len(data)
            archive.addfile(info, io.BytesIO(data))
    return path


def test_a_zip_of_high_ratio_is_read_no_further_than_a_file_may_be_long(tmp_path: Path) -> None:
    path = tmp_path / "bomb.zip"
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        with archive.open("bomb.cif", "w", force_zip64=True) as member:
            for _ in range(2 * MAX_BYTES // MEGABYTE):
                member.write(b" " * MEGABYTE)
        archive.writestr("good.cif", GOOD)
    assert path.stat().st_size < 100_000
    files, rejects = _read(path)
    assert [file.file for file in files] == ["good.cif"]
    assert rejects["bomb.cif"].code == "too_large"
    assert "32 MB" in rejects["bomb.cif"].reason


def test_a_zip_that_lies_about_sizes_is_found_out(tmp_path: Path) -> None:
    """The header says 100 bytes, the stream holds 128 MB."""
    squeeze = zlib.compressobj(9, zlib.DEFLATED, -15)
    packed = b"".join(squeeze.compress(b" " * MEGABYTE) for _ in range(128)) + squeeze.flush()
    path = tmp_path / "liar.zip"
    with zipfile.ZipFile(path, "w", zipfile.ZIP_STORED) as archive:
        archive.writestr("liar.cif", packed)
    raw = bytearray(path.read_bytes())
    for signature, method, size in ((b"PK\x03\x04", 8, 22), (b"PK\x01\x02", 10, 24)):
        start = raw.find(signature)
        raw[start + method : start + method + 2] = struct.pack("<H", zipfile.ZIP_DEFLATED)
        raw[start + size : start + size + 4] = struct.pack("<L", 100)
    path.write_bytes(raw)
    start_s = time.process_time()
    files, rejects = _read(path)
    assert files == []
    assert rejects["liar.cif"].code == "unreadable"
    assert time.process_time() - start_s < 2


def _overlapping(path: Path, members: int) -> None:
    """A zip whose members are all the same stretch of the file, 16 MB of blanks each."""
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("0000.cif", b" " * (16 * MEGABYTE))
        info = archive.infolist()[0]
        for number in range(1, members):
            twin = zipfile.ZipInfo("0000.cif")
            for field in ("CRC", "compress_size", "file_size", "header_offset", "compress_type"):
                setattr(twin, field, getattr(info, field))
            twin.comment = str(number).encode()
            archive.filelist.append(twin)


def test_members_that_share_their_bytes_do_not_add_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(unpacking, "FREE_BYTES", 8 * MEGABYTE)
    path = tmp_path / "overlap.zip"
    _overlapping(path, 20_000)  # 320 GB in 1 MB
    start_s = time.process_time()
    found = list(read_all([path]))
    assert time.process_time() - start_s < 10
    last = found[-1]
    assert isinstance(last, Rejected)
    assert last.code in ("bomb", "unreadable")  # later versions of Python refuse overlaps
    assert len([one for one in found if isinstance(one, StructureFile)]) < 60


@pytest.mark.parametrize("ending", ["gz", "bz2", "xz"])
def test_a_tar_of_blanks_is_left(
    tmp_path: Path, ending: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Members that are no CIF count too: skipping them means unpacking them."""
    monkeypatch.setattr(unpacking, "FREE_BYTES", 8 * MEGABYTE)
    path = tmp_path / f"bomb.tar.{ending}"
    blanks = [(tarfile.TarInfo(f"{n}.bin"), b"\0" * MEGABYTE) for n in range(40)]
    _tar(path, [(tarfile.TarInfo("good.cif"), GOOD), *blanks], f"w:{ending}")
    assert path.stat().st_size < 100_000
    files, rejects = _read(path)
    assert [file.file for file in files] == ["good.cif"]
    assert rejects[path.name].code == "bomb"
    assert "100 times its size" in rejects[path.name].reason


def test_a_long_header_of_a_tar_is_within_the_allowance(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(unpacking, "FREE_BYTES", 8 * MEGABYTE)
    info = tarfile.TarInfo("x")
    info.type = tarfile.XHDTYPE
    path = _tar(tmp_path / "pax.tgz", [(info, b"9" * (40 * MEGABYTE))])
    _, rejects = _read(path)
    assert rejects[path.name].code == "bomb"


def test_a_packed_cif_of_blanks_is_too_large(library: Library, tmp_path: Path) -> None:
    for name, pack in (("a.cif.gz", gzip.compress), ("b.cif.bz2", bz2.compress)):
        (tmp_path / name).write_bytes(pack(b" " * (MAX_BYTES + MEGABYTE)))
    tally = library.add([tmp_path / "a.cif.gz", tmp_path / "b.cif.bz2"])
    assert [reject.code for reject in tally.rejects] == ["too_large", "too_large"]


def test_an_xz_that_asks_for_gigabytes_gets_none(tmp_path: Path) -> None:
    """A dictionary of 1.5 GB in the header, under a limit of 1 GB for the process."""
    filters = [{"id": lzma.FILTER_LZMA2, "preset": 0, "dict_size": 1 << 16}]
    data = bytearray(lzma.compress(GOOD, lzma.FORMAT_XZ, filters=filters))
    at = data.index(b"\x21\x01", 12)  # filter LZMA2, one byte of properties: 2^n of dictionary
    data[at + 2] = 37
    size = (data[12] + 1) * 4
    data[12 + size - 4 : 12 + size] = struct.pack("<L", zlib.crc32(data[12 : 12 + size - 4]))
    path = tmp_path / "greedy.cif.xz"
    path.write_bytes(data)
    script = (
        "import resource, sys; from pathlib import Path\n"
        "from phaseid.library.sources import read_all\n"
        "resource.setrlimit(resource.RLIMIT_AS, (1 << 30, 1 << 30))\n"
        "print([one.code for one in read_all([Path(sys.argv[1])])])\n"
    )
    if os.name != "posix":
        pytest.skip("needs a limit on memory")
    done = subprocess.run(
        [sys.executable, "-c", script, str(path)], capture_output=True, text=True, check=False
    )
    assert done.stdout.strip() == "['unreadable']", done.stderr


def test_names_that_lead_elsewhere_write_nothing(library: Library, tmp_path: Path) -> None:
    inside = tmp_path / "in"
    inside.mkdir()
    names = ["../up.cif", "/etc/root.cif", "C:\\win.cif", "a/../../b.cif", "x\x1b[2J\u202e.cif"]
    with zipfile.ZipFile(inside / "a.zip", "w") as archive:
        for number, name in enumerate(names):
            archive.writestr(name, rock_salt("NaCl", 5 + number / 10))
    members = [
        (tarfile.TarInfo(name), rock_salt("KCl", 6 + number / 10).encode())
        for number, name in enumerate(names)
    ]
    _tar(inside / "b.tar", members, "w:")
    before = sorted(tmp_path.rglob("*"))
    assert library.add([inside]).added == 10
    assert sorted(tmp_path.rglob("*")) == before


def test_links_in_archives_are_no_files(tmp_path: Path) -> None:
    secret = tmp_path / "secret.cif"
    secret.write_bytes(GOOD)
    links = []
    for kind in (tarfile.SYMTYPE, tarfile.LNKTYPE, tarfile.FIFOTYPE, tarfile.CHRTYPE):
        info = tarfile.TarInfo("link.cif")
        info.type, info.linkname = kind, str(secret)
        links.append((info, b""))
    path = _tar(tmp_path / "links.tar", links, "w:")
    files, rejects = _read(path)
    assert files == []
    assert rejects["links.tar"].code == "no_structures"


def test_an_archive_in_an_archive_is_told(tmp_path: Path) -> None:
    inner = io.BytesIO()
    with zipfile.ZipFile(inner, "w") as archive:
        archive.writestr("MgO.cif", GOOD)
    with zipfile.ZipFile(tmp_path / "outer.zip", "w") as archive:
        archive.writestr("deep/inner.zip", inner.getvalue())
        archive.writestr("good.cif", GOOD)
    _tar(tmp_path / "outer.tar", [(tarfile.TarInfo("inner.tgz"), b"x")], "w:")
    files, rejects = _read(tmp_path / "outer.zip", tmp_path / "outer.tar")
    assert [file.file for file in files] == ["good.cif"]
    assert {name: reject.code for name, reject in rejects.items()} == {
        "deep/inner.zip": "nested_archive",
        "inner.tgz": "nested_archive",
    }


@pytest.mark.skipif(os.name != "posix", reason="needs links and pipes")
def test_links_and_pipes_in_a_folder(tmp_path: Path, write_cif: WriteCif) -> None:
    write_cif("f/a/real.cif", "MgO")
    folder, outside = tmp_path / "f", write_cif("outside.cif", "NaCl")
    (folder / "loop").symlink_to(folder)
    (folder / "out.cif").symlink_to(outside)
    (folder / "endless.cif").symlink_to("/dev/zero")
    (folder / "itself.cif").symlink_to(folder / "itself.cif")
    (folder / "gone.cif").symlink_to(folder / "a" / "none.cif")
    (folder / "same.cif").symlink_to(Path("a") / "real.cif")
    (folder / "python").symlink_to(sys.executable)  # no structure file: not worth a word
    os.mkfifo(folder / "pipe.cif")
    os.mkfifo(folder / "pipe.zip")
    os.mkfifo(folder / "pipe")
    files, rejects = _read(folder)
    assert [file.file for file in files] == ["same.cif", "real.cif"]
    assert {name: reject.code for name, reject in rejects.items()} == {
        "loop": "link",
        "out.cif": "link",
        "endless.cif": "link",
        "itself.cif": "unreadable",
        "gone.cif": "no_such_file",
        "pipe.cif": "no_file",
        "pipe.zip": "no_file",
    }


@pytest.mark.skipif(os.name != "posix", reason="needs devices")
def test_what_is_no_file_is_refused_by_name_too(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.cif")
    paths = [tmp_path / "pipe.cif", Path("/dev/zero"), tmp_path / ("x" * 300), Path("a\0b")]
    _, rejects = _read(*paths)
    assert [reject.code for reject in rejects.values()] == [
        "no_file", "no_file", "unreadable", "unreadable",
    ]  # fmt: skip


@pytest.mark.skipif(os.name != "posix", reason="needs names that are no text")
def test_a_name_that_is_no_text_is_stored_readably(library: Library, tmp_path: Path) -> None:
    folder = os.fsencode(tmp_path / "f")
    os.mkdir(folder)  # noqa: PTH102 - bytes
    with open(folder + b"/caf\xe9.cif", "wb") as file:  # noqa: PTH123
        file.write(GOOD)
    with open(folder + b"/\xff.cif", "wb") as file:  # noqa: PTH123
        file.write(b"no CIF")
    info = tarfile.TarInfo(os.fsdecode(b"\xfe.cif"))
    _tar(tmp_path / "x.tar", [(info, rock_salt("NaCl").encode())], "w:")
    tally = library.add([tmp_path / "f", tmp_path / "x.tar"])
    assert (tally.added, tally.rejected) == (2, 1)
    assert [phase.source.file for phase in library.phases()] == ["caf\\udce9.cif", "\\udcfe.cif"]
    assert library.rejects()[0]["file"] == "\\udcff.cif"


def test_a_folder_may_be_deep(tmp_path: Path) -> None:
    deepest = tmp_path.joinpath(*["d"] * 200)
    deepest.mkdir(parents=True)
    (deepest / "deep.cif").write_bytes(GOOD)
    usual = sys.getrecursionlimit()
    sys.setrecursionlimit(len(inspect.stack()) + 100)  # a walk that recurses ends here
    try:
        files, rejects = _read(tmp_path)
    finally:
        sys.setrecursionlimit(usual)
    assert [file.file for file in files] == ["deep.cif"]
    assert rejects == {}


def test_ten_thousand_rejects_take_little(library: Library, tmp_path: Path) -> None:
    with zipfile.ZipFile(tmp_path / "bad.zip", "w") as archive:
        for number in range(10_000):
            archive.writestr(f"{number}.cif", "")
    start_s = time.process_time()
    tally = library.add([tmp_path / "bad.zip"])
    assert tally.rejected == len(library.rejects()) == 10_000
    assert time.process_time() - start_s < 15


def test_the_allowance_leaves_honest_archives_alone(tmp_path: Path) -> None:
    """Text packs 3 to 20 times; the same file 200 times over packs most of all."""
    path = _tar(
        tmp_path / "x.tar.xz", [(tarfile.TarInfo(f"{n}.cif"), GOOD) for n in range(200)], "w:xz"
    )
    files, rejects = _read(path)
    assert (len(files), rejects) == (200, {})
    assert sources.is_structure_file("MgO.cif.xz")

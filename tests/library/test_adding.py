"""Adding: files, folders and archives; twice, in another order, as a new version, damaged."""

from __future__ import annotations

import bz2
import gzip
import hashlib
import io
import itertools
import lzma
import os
import sqlite3
import tarfile
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from phaseid.crystal.cif import read_cif
from phaseid.errors import InputError, LibraryError
from phaseid.library import Library, connection, open_default
from phaseid.library.adding import suggested_workers
from phaseid.library.entries import entry
from phaseid.library.writer import combined
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]
SHARED = Path(__file__).parents[3] / "shared" / "data"


def test_a_file_is_added_once(library: Library, write_cif: WriteCif) -> None:
    path = write_cif("periclase.cif", "MgO", name="Periclase")
    first = library.add([path])
    digest = library.digest
    second = library.add([path])
    assert (first.added, second.added, second.unchanged) == (1, 0, 1)
    assert library.digest == digest
    assert [(p.name, p.formula, p.source.file) for p in library.phases()] == [
        ("Periclase", "MgO", "periclase.cif")
    ]


def test_the_same_content_in_another_file_changes_nothing(
    library: Library, write_cif: WriteCif
) -> None:
    library.add([write_cif("a.cif", "MgO")])
    digest = library.digest
    tally = library.add([write_cif("b.cif", "MgO", name="Periclase")])
    assert (tally.added, tally.unchanged, library.digest) == (0, 1, digest)
    # the second name is remembered all the same
    assert [p.source.file for p in library.find("periclase")] == ["a.cif"]


def test_the_digest_does_not_depend_on_the_order(tmp_path: Path, write_cif: WriteCif) -> None:
    paths = [write_cif(f"{name}.cif", name) for name in ("MgO", "NaCl", "KCl")]
    digests, ids = set(), set()
    for number, order in enumerate(itertools.permutations(paths)):
        with Library.create(tmp_path / f"{number}.sqlite") as library:
            library.add(order)
            digests.add(library.digest)
            ids.add(frozenset(p.phase_id for p in library.phases()))
    assert len(digests) == 1
    assert len(ids) == 1


def test_the_digest_tells_libraries_apart(library: Library, write_cif: WriteCif) -> None:
    seen = {library.digest}
    for name in ("MgO", "NaCl", "KCl"):
        library.add([write_cif(f"{name}.cif", name)])
        seen.add(library.digest)
    assert len(seen) == 4


def test_a_digest_forgets_what_went() -> None:
    contents = [f"{n:064x}" for n in (2**255 - 1, 2**200 + 12345, 77 << 190)]
    both = combined("0" * 32, plus=contents)
    assert combined(both, minus=contents[:2]) == combined("0" * 32, plus=contents[2:])
    assert combined(both, minus=contents) == "0" * 32


def test_a_new_version_of_a_numbered_entry_replaces_it(
    library: Library, write_cif: WriteCif
) -> None:
    library.add([write_cif("1.cif", "MgO", cod="9000001", name="Periclase")])
    (old,) = library.phases()
    tally = library.add([write_cif("2.cif", "MgO", 4.2117, cod="9000001")])
    assert (tally.added, tally.replaced) == (0, 1)
    (new,) = library.phases()
    assert new.cell[0] == 4.2117
    assert new.phase_id != old.phase_id
    assert library.find(old.phase_id) == []
    assert library.find("periclase") == []
    assert library.find("9000001") == [new]
    back = library.add([write_cif("1.cif", "MgO", cod="9000001", name="Periclase")])
    assert (back.replaced, library.phases()) == (1, [old])


def test_an_edited_file_replaces_what_it_held(library: Library, write_cif: WriteCif) -> None:
    library.add([write_cif("mine.cif", "MgO")])
    assert library.add([write_cif("mine.cif", "MgO", 4.22)]).replaced == 1
    # another compound under the same file name is no new version: nothing stored is lost
    assert library.add([write_cif("mine.cif", "CaO")]).added == 1
    assert {p.formula for p in library.phases()} == {"MgO", "CaO"}


def test_files_of_one_run_do_not_replace_each_other(library: Library, write_cif: WriteCif) -> None:
    paths = [
        write_cif("a/x.cif", "MgO", cod="9000001"),
        write_cif("b/y.cif", "MgO", 4.25, cod="9000001"),
    ]
    assert library.add(paths).added == 2
    digest = library.digest
    assert library.add(paths[::-1]).unchanged == 2
    assert library.digest == digest


def test_a_folder_is_searched_to_its_depths(library: Library, write_cif: WriteCif) -> None:
    write_cif("tree/a/b/c/MgO.cif", "MgO")
    write_cif("tree/NaCl.CIF", "NaCl")
    path = write_cif("tree/KCl.cif", "KCl")
    path.with_name("notes.txt").write_text("not a structure")
    with zipfile.ZipFile(path.parent / "more.zip", "w") as archive:
        archive.writestr("deep/NaF.cif", rock_salt("NaF"))
    tally = library.add([path.parent])
    assert (tally.added, tally.rejected) == (4, 0)
    assert {p.source.file for p in library.phases()} == {
        "MgO.cif", "NaCl.CIF", "KCl.cif", "deep/NaF.cif",
    }  # fmt: skip


def _tar(path: Path, mode: str, members: dict[str, str]) -> None:
    with tarfile.open(path, mode) as archive:  # type: ignore[call-overload]
        for name, text in members.items():
            data = text.encode()
            info = tarfile.TarInfo(name)
            info.size = len(data)
            archive.addfile(info, io.BytesIO(data))


MEMBERS = {"oxides/MgO.cif": rock_salt("MgO"), "../halides/NaCl.cif": rock_salt("NaCl")}


@pytest.mark.parametrize("name", ["x.zip", "x.tar", "x.tar.gz", "x.tgz", "x.tar.bz2", "x.tar.xz"])
def test_an_archive_is_read_member_by_member(library: Library, tmp_path: Path, name: str) -> None:
    path = tmp_path / name
    if name.endswith(".zip"):
        with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
            for member, text in MEMBERS.items():
                archive.writestr(member, text)
            archive.writestr("README.txt", "no structure")
            archive.writestr("__MACOSX/oxides/._MgO.cif", "no structure")
    else:
        _tar(path, "w:" + {"gz": "gz", "tgz": "gz", "bz2": "bz2", "xz": "xz"}.get(
            name.rsplit(".", 1)[1], ""), {**MEMBERS, "README": "no structure"})  # fmt: skip
    before = set(tmp_path.rglob("*"))
    tally = library.add([path])
    assert (tally.added, tally.rejects) == (2, [])
    assert {p.source.file for p in library.phases()} == set(MEMBERS)
    assert set(tmp_path.rglob("*")) == before  # nothing was unpacked


@pytest.mark.parametrize(
    ("ending", "pack"), [("gz", gzip.compress), ("bz2", bz2.compress), ("xz", lzma.compress)]
)
def test_a_packed_cif_is_a_cif(
    library: Library, tmp_path: Path, ending: str, pack: Callable[[bytes], bytes]
) -> None:
    path = tmp_path / f"MgO.cif.{ending}"
    path.write_bytes(pack(rock_salt("MgO").encode()))
    assert library.add([path]).added == 1
    path.write_bytes(path.read_bytes()[:-20])
    tally = library.add([path])
    assert (tally.rejected, tally.rejects[0].file) == (1, path.name)
    assert "cannot be read" in tally.rejects[0].reason


def test_every_block_of_a_file_counts(library: Library, tmp_path: Path) -> None:
    path = tmp_path / "three.cif"
    path.write_text(rock_salt("MgO") + rock_salt("NaCl") + "data_no_cell\n_cell_length_a ?\n"
                    + rock_salt("KCl"))  # fmt: skip
    tally = library.add([path])
    assert tally.added == 3
    assert library.add([path]).unchanged == 3


def test_a_bad_file_stops_nothing(library: Library, tmp_path: Path, write_cif: WriteCif) -> None:
    good = write_cif("good.cif", "MgO")
    bad = tmp_path / "bad.cif"
    bad.write_text("data_x\n_cell_length_a 4.2\nloop_\n_atom_site_label\n_atom_site_fract_x\nA\n")
    fake = tmp_path / "fake.zip"
    fake.write_bytes(b"PK no zip at all")
    empty = tmp_path / "empty"
    empty.mkdir()
    tally = library.add([bad, tmp_path / "none.cif", fake, empty, good])
    assert (tally.added, tally.rejected, tally.exit_code) == (1, 4, 0)
    by_file = {reject.file: reject for reject in tally.rejects}
    assert set(by_file) == {"bad.cif", "none.cif", "fake.zip", "empty"}
    assert by_file["none.cif"].reason == "there is no such file or folder"
    assert all(reject.reason and reject.code for reject in tally.rejects)
    assert {r["file"] for r in library.rejects()} == set(by_file)


def test_a_mended_file_is_no_longer_a_reject(
    library: Library, tmp_path: Path, write_cif: WriteCif
) -> None:
    path = tmp_path / "mended.cif"
    path.write_text("this is no CIF")
    assert library.add([path]).exit_code == 2
    assert library.add([path]).rejected == 1
    assert len(library.rejects()) == 1
    write_cif("mended.cif", "MgO")
    assert library.add([path]).added == 1
    assert library.rejects() == []


def test_the_tally_says_what_the_contract_says(library: Library, tmp_path: Path) -> None:
    path = tmp_path / "no.cif"
    path.write_text("nothing")
    tally = library.add([path])
    said = tally.as_json()
    assert said["schema"] == "phaseid.library-add/1"
    assert {key: said[key] for key in ("added", "unchanged", "replaced", "rejected")} == {
        "added": 0, "unchanged": 0, "replaced": 0, "rejected": 1,
    }  # fmt: skip
    assert said["rejects"][0]["file"] == "no.cif"
    assert said["rejects"][0]["reason"]
    assert tally.summary() == "0 added, 0 unchanged, 0 replaced, 1 rejected"
    assert tally.exit_code == 2


def test_progress_counts_files(library: Library, write_cif: WriteCif, tmp_path: Path) -> None:
    write_cif("d/a.cif", "MgO")
    write_cif("d/b.cif", "NaCl")
    with zipfile.ZipFile(tmp_path / "d" / "c.zip", "w") as archive:
        archive.writestr("KCl.cif", rock_salt("KCl"))
    calls: list[tuple[int, int | None]] = []
    library.add([tmp_path / "d"], lambda done, total: calls.append((done, total)))
    assert calls == [(1, 3), (2, 3), (3, 3)]


def test_processes_give_what_one_gives(tmp_path: Path) -> None:
    path = tmp_path / "many.zip"
    with zipfile.ZipFile(path, "w") as archive:
        for number in range(70):  # three chunks
            archive.writestr(f"{number:02}.cif", rock_salt("MgO", round(4.1 + number / 500, 4)))
        archive.writestr("bad.cif", "no CIF")
    with Library.create(tmp_path / "1.sqlite") as one, Library.create(tmp_path / "2.sqlite") as two:
        serial = one.add([path])
        parallel = two.add([path], workers=2)
        assert serial.as_json() == parallel.as_json()
        assert one.phases() == two.phases()
        assert one.digest == two.digest


def test_few_files_are_not_worth_a_process(write_cif: WriteCif, tmp_path: Path) -> None:
    assert suggested_workers([write_cif("a.cif", "MgO")]) == 1
    _tar(tmp_path / "a.tar", "w:", {"MgO.cif": rock_salt("MgO")})
    assert suggested_workers([tmp_path / "a.tar"]) >= 1


def test_two_structures_with_the_same_short_id_are_told_apart(
    library: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(
        "phaseid.library.entries.hashlib.sha256",
        lambda data: _Hash("a" * 8 + hashlib.md5(data).hexdigest() * 2),
    )
    crystals = [
        read_cif(rock_salt("MgO", a).encode(), "x.cif").crystals[0] for a in (4.20, 4.21, 4.22)
    ]
    assert library.add_crystals(crystals).added == 3
    ids = [phase.phase_id for phase in library.phases()]
    assert len(set(ids)) == 3
    assert ids[0] == "MgO-aaaaaaaa"


class _Hash:
    def __init__(self, text: str) -> None:
        self._text = text[:64]

    def hexdigest(self) -> str:
        return self._text


def test_a_structure_that_breaks_the_arithmetic_is_a_reject(
    library: Library, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    def breaks(*_args: object, **_kwargs: object) -> None:
        raise ZeroDivisionError("no volume")

    paths = [write_cif("a.cif", "MgO"), write_cif("b.cif", "NaCl")]
    with monkeypatch.context() as patch:
        patch.setattr("phaseid.crystal.lines.compute_lines", breaks)
        tally = library.add(paths)
    assert [(r.file, r.code) for r in tally.rejects] == [
        ("a.cif", "no_lines"),
        ("b.cif", "no_lines"),
    ]
    assert library.add(paths).added == 2


def test_a_full_disk_is_told_and_loses_nothing(
    library: Library, tmp_path: Path, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    library.add([write_cif("first.cif", "MgO")])
    digest = library.digest
    open_for_writing = connection.open_for_writing

    def small(path: Path) -> sqlite3.Connection:
        conn = open_for_writing(path)
        pages = conn.execute("PRAGMA page_count").fetchone()[0]
        conn.execute(f"PRAGMA max_page_count = {pages}")
        return conn

    monkeypatch.setattr(connection, "open_for_writing", small)
    paths = [write_cif(f"{n}.cif", "NaCl", round(5.5 + n / 100, 3)) for n in range(30)]
    with pytest.raises(LibraryError, match=r"mine\.sqlite: the disk is full.*free some space"):
        library.add(paths)
    assert (len(library), library.digest) == (1, digest)
    monkeypatch.undo()
    assert library.add(paths).added == 30


def test_a_full_disk_while_the_starter_library_is_built_names_the_library(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    mine = tmp_path / "mine.sqlite"
    monkeypatch.setenv("PHASEID_LIBRARY", str(mine))
    open_for_writing = connection.open_for_writing

    def small(path: Path) -> sqlite3.Connection:
        conn = open_for_writing(path)
        conn.execute("PRAGMA max_page_count = 40")
        return conn

    monkeypatch.setattr(connection, "open_for_writing", small)
    with pytest.raises(LibraryError) as full:
        open_default()
    assert str(full.value).startswith(f"{mine}: the disk is full")
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_opened_is_told(
    library: Library, tmp_path: Path, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_cif("folder/open.cif", "MgO")
    closed = tmp_path / "folder" / "closed"
    closed.mkdir()
    scandir = os.scandir

    def refuse(path: Any) -> Any:
        if Path(path) == closed:
            raise PermissionError(13, "Permission denied", str(closed))
        return scandir(path)

    monkeypatch.setattr(os, "scandir", refuse)
    tally = library.add([tmp_path / "folder"])
    assert tally.added == 1
    assert [(r.file, r.reason) for r in tally.rejects] == [
        ("closed", "the folder cannot be opened (Permission denied)")
    ]


def test_an_entry_does_not_depend_on_where_its_file_lies() -> None:
    (crystal,) = read_cif(rock_salt("MgO").encode(), "a.cif").crystals
    (moved,) = read_cif(rock_salt("MgO", name="Periclase").encode(), "b.cif").crystals
    assert entry(crystal, "/x/a.cif").content == entry(moved, "/y/b.cif").content


@pytest.mark.skipif(not SHARED.is_dir(), reason="the folder of open structures is not here")
def test_five_hundred_open_structures_go_in(tmp_path: Path) -> None:
    with Library.create(tmp_path / "open.sqlite") as library:
        tally = library.add([SHARED / "open_structures.zip"])
        assert tally.read + tally.rejected >= 524
        assert tally.rejected <= 5
        files = {phase.source.file for phase in library.phases()}
        assert "zeolites/LTN.cif" in files


def test_an_empty_name_is_not_this_folder(library: Library) -> None:
    with pytest.raises(InputError, match="an empty name"):
        library.add([""])

"""Project files on disk: what can be read, what is refused, and that a save leaves the old file or the new one."""

from __future__ import annotations

import os
import stat
import tomllib
from pathlib import Path
from typing import Any

import pytest

from budget.project import document as doc
from budget.project import store, toml_load
from budget.project.problems import ProjectError
from budget.project.starter import starter
from budget.project.store import ChangedOnDiskError

TEXT = """# the head
format = 1
strange = { a = 1 }   # kept
[bus]
low = "22.00 V"       # on battery
nominal = 28.0
high = 0x1D
[[filter]]
id = "FL1"  # first
dm = []
cm = []
"""
NAME = ("filter", 0, "name")


@pytest.fixture
def path(tmp_path: Path) -> Path:
    file = tmp_path / "p.toml"
    file.write_text(TEXT)
    return file


def write(folder: Path, **files: str) -> None:
    for name, text in files.items():
        file = folder / (name.replace("__", "/") + ".toml")
        file.parent.mkdir(exist_ok=True)
        file.write_text(text)


def refused(path: Path) -> str:
    with pytest.raises(ProjectError) as caught:
        store.load(path)
    text = str(caught.value)
    assert all(line.isprintable() and line.isascii() for line in text.split("\n"))
    return text


# -- saving


def test_save_keeps_comments_typed_text_and_unknown_keys(path: Path) -> None:
    loaded = store.load(path)
    saved = store.save(doc.put(loaded.document, NAME, "in"), path, loaded.fingerprint)
    assert path.read_text() == TEXT.replace("cm = []\n", 'cm = []\nname = "in"\n')
    assert saved.notes == ()
    assert not store.changed(path, saved.fingerprint)
    assert os.listdir(path.parent) == ["p.toml"]


def test_unchanged_is_saved_byte_for_byte(path: Path) -> None:
    for raw in (
        TEXT.encode(),
        TEXT.replace("\n", "\r\n").encode(),
        b"\xef\xbb\xbf" + TEXT.encode(),
        TEXT.rstrip().encode(),
    ):
        path.write_bytes(raw)
        loaded = store.load(path)
        store.save(loaded.document, path, loaded.fingerprint)
        assert path.read_bytes() == raw
        mark = store.save(doc.put(loaded.document, NAME, "x"), path, None, over=True).fingerprint
        assert path.read_bytes().startswith(raw[:20])
        assert path.read_bytes().count(b"\r") == (path.read_bytes().count(b"\n") if b"\r" in raw else 0)
        assert doc.get(store.load(path).document, NAME) == "x"
        assert store.load(path).fingerprint == mark


@pytest.mark.parametrize("call", ["write", "fsync", "replace", "fchmod", "mkstemp"])
def test_a_failure_leaves_the_old_file_whole(path: Path, call: str, monkeypatch: pytest.MonkeyPatch) -> None:
    loaded = store.load(path)

    def fail(*_: Any, **__: Any) -> None:
        raise OSError(28, "No space left on device")

    if call == "write":
        opened = os.fdopen

        def fdopen(*args: Any) -> Any:
            handle = opened(*args, buffering=0)

            class Full:
                write, flush, fileno = staticmethod(fail), handle.flush, handle.fileno
                __enter__ = lambda self: self  # noqa: E731
                __exit__ = lambda self, *_: handle.close()  # noqa: E731

            return Full()

        monkeypatch.setattr(store.os, "fdopen", fdopen)
    elif call == "mkstemp":
        monkeypatch.setattr(store.tempfile, "mkstemp", fail)
    else:
        monkeypatch.setattr(store.os, call, fail)
    with pytest.raises(ProjectError, match=r"no space left.*Nothing was changed"):
        store.save(doc.put(loaded.document, NAME, "x"), path, loaded.fingerprint)
    monkeypatch.undo()
    assert path.read_text() == TEXT
    assert os.listdir(path.parent) == ["p.toml"]
    assert not store.changed(path, loaded.fingerprint)  # type: ignore[arg-type]


def test_text_that_would_read_back_otherwise_is_not_written(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    loaded = store.load(path)
    for text in ("format = 2", "format ="):
        monkeypatch.setattr(store.toml_text, "render", lambda *_, text=text: store.toml_text.Rendered(text, ()))
        with pytest.raises(ProjectError, match=r"read back.*nothing was written"):
            store.save(doc.put(loaded.document, NAME, "x"), path, loaded.fingerprint)
    assert path.read_text() == TEXT


def test_values_that_cannot_be_written_are_refused(path: Path) -> None:
    document = store.load(path).document
    deep: Any = 1
    for _ in range(3000):
        deep = [deep]
    for value in (16**5000, deep):
        with pytest.raises(ProjectError, match="nothing was written"):
            store.render(doc.put(document, NAME, value))


def test_mode_and_link_are_kept(path: Path, tmp_path: Path) -> None:
    path.chmod(0o640)
    (tmp_path / "sub").mkdir()
    link = tmp_path / "sub" / "link.toml"
    link.symlink_to("../p.toml")
    loaded = store.load(link)
    store.save(doc.put(loaded.document, NAME, "x"), link, loaded.fingerprint)
    assert link.is_symlink()
    assert stat.S_IMODE(path.stat().st_mode) == 0o640
    assert doc.get(store.load(path).document, NAME) == "x"
    assert os.listdir(link.parent) == ["link.toml"]


def test_a_new_file_has_the_mode_of_the_user(tmp_path: Path) -> None:
    (tmp_path / "by hand").touch()
    store.write_text(tmp_path / "new.toml", "a = 1\n")
    assert (tmp_path / "new.toml").stat().st_mode == (tmp_path / "by hand").stat().st_mode


def test_changed_on_disk(path: Path) -> None:
    loaded = store.load(path)
    mark = loaded.fingerprint
    assert mark is not None
    assert not store.changed(path, mark)
    os.utime(path, ns=(1, 1))  # touched only
    assert not store.changed(path, mark)
    store.save(loaded.document, path, mark)
    path.write_text(TEXT.replace("22.00", "23.00"))  # as long as before
    os.utime(path, ns=(2, 2))
    assert store.changed(path, mark)
    with pytest.raises(ChangedOnDiskError, match="changed by someone else"):
        store.save(loaded.document, path, mark)
    assert "23.00" in path.read_text()
    path.unlink()
    assert store.changed(path, mark)
    assert store.fingerprint(path) is None
    with pytest.raises(ChangedOnDiskError, match="removed"):
        store.save(loaded.document, path, mark)
    assert not path.exists()
    store.save(loaded.document, path, mark, over=True)
    assert path.read_text() == TEXT


def test_a_new_file_replaces_none(path: Path, tmp_path: Path) -> None:
    document = store.load(path).document
    with pytest.raises(ChangedOnDiskError, match="exists"):
        store.save(document, path, None)
    dangling = tmp_path / "dangling.toml"
    dangling.symlink_to("nowhere.toml")
    with pytest.raises(ChangedOnDiskError, match="exists"):
        store.save(document, dangling, None)


def test_places_that_cannot_be_written(path: Path, tmp_path: Path) -> None:
    document = store.load(path).document
    os.mkfifo(tmp_path / "pipe")
    places = (
        tmp_path,
        tmp_path / "pipe",
        tmp_path / "no" / "x.toml",
        path / "x.toml",
        tmp_path / ("x" * 300),
        tmp_path / "a\0b",
    )
    for place in places:
        with pytest.raises(ProjectError) as caught:
            store.save(document, place, None, over=True)
        assert str(caught.value).isprintable()


# -- reading


def test_what_is_no_file(tmp_path: Path) -> None:
    assert "does not exist" in refused(tmp_path / "nix.toml")
    assert "folder" in refused(tmp_path)
    os.mkfifo(tmp_path / "pipe")
    assert "not an ordinary file" in refused(tmp_path / "pipe")
    assert "not an ordinary file" in refused(Path("/dev/zero"))
    assert "could not be read" in refused(tmp_path / "a\0b")
    assert "could not be read" in refused(tmp_path / ("x" * 300))
    (tmp_path / "loop").symlink_to("loop")
    assert "could not be read" in refused(tmp_path / "loop")
    refused(tmp_path / "a\x1b[31m\nb")


def test_what_is_no_project(path: Path) -> None:
    with open(path, "wb") as handle:
        handle.truncate(50_000_000)
    assert "50.0 MB" in refused(path)
    for raw, words in (
        (b"a = 1\nb = '\xff'\n", "line 2: a byte that is not UTF-8"),
        (TEXT.encode("utf-16"), "not UTF-8"),
        (b"[" * 100_000, "TOML|nested"),
        (b"a = " + b"[" * 100_000, "nested"),
        (b"a = " + b"9" * 10_000, "number too long"),
        (b"a = '\0'", "TOML"),
        (b"\0" * 100, "TOML"),
        (b"\x1b]0;x\x07", "TOML"),
    ):
        path.write_bytes(raw)
        assert any(word in refused(path) for word in words.split("|")), raw[:20]


def test_an_empty_file_is_a_project_of_nothing(path: Path) -> None:
    path.write_text("")
    loaded = store.load(path)
    assert loaded.document.data == {}
    store.save(doc.put(loaded.document, ("format",), 1), path, loaded.fingerprint)
    assert path.read_text() == "format = 1\n"


def test_all_faults_of_the_syntax_are_told(path: Path) -> None:
    path.write_text("[bus]\nlow = \n[rules]\ngrowth = 5 %\n[[filter]]\nid = 'FL1'\n[[case]]\nid = x\n")
    text = refused(path)
    for line in (2, 4, 8):
        assert f"line {line}" in text
    assert text.count("\n") == 3
    assert "valid TOML was expected" in text


def test_far_too_many_faults(path: Path) -> None:
    path.write_text("[a]\nb = \n" * 5000)
    assert refused(path).count("\n") <= toml_load.MAX_FAULTS


# -- shelf files


PART = "[shelf.filter.%s]\nrated_current = 1\n"


def load(folder: Path, files: str) -> store.Loaded:
    (folder / "p.toml").write_text(f"shelf_files = {files}\n")
    return store.load(folder / "p.toml")


def test_shelf_files_below_the_folder(tmp_path: Path) -> None:
    write(tmp_path, a=PART % "a", parts__b='shelf_files = ["c.toml"]\n' + PART % "b", parts__c=PART % "c")
    loaded = load(tmp_path, '["a.toml", "./parts/b.toml"]')
    assert loaded.problems == ()
    assert [s.name for s in loaded.shelves] == ["a.toml", "parts/b.toml", "parts/c.toml"]
    assert loaded.shelves[2].data["shelf"] == {"filter": {"c": {"rated_current": 1}}}


def test_a_shared_shelf_is_read_once(tmp_path: Path) -> None:
    write(tmp_path, a='shelf_files = ["c.toml"]', b='shelf_files = ["c.toml"]', c=PART % "c")
    loaded = load(tmp_path, '["a.toml", "b.toml", "c.toml"]')
    assert loaded.problems == ()
    assert [s.name for s in loaded.shelves] == ["a.toml", "c.toml", "b.toml"]


@pytest.mark.parametrize(
    ("files", "words"),
    [
        ('["nix.toml"]', "does not exist"),
        ('["../secret.toml"]', "outside"),
        ('["/etc/passwd"]', "outside"),
        ('["out.toml"]', "outside"),
        ('["sub"]', "folder"),
        ('["p.toml"]', "circle"),
        ('["ring.toml"]', "circle"),
        ('["own.toml"]', "circle"),
        ('["broken.toml"]', "line 2"),
        ('["a\\u0000b"]', "not a file name"),
        ('["a\\u001b[31m.toml"]', "does not exist"),
        ('["pipe"]', "not an ordinary file"),
        (f'["{"x" * 5000}"]', ""),
    ],
)
def test_a_bad_shelf_is_a_problem_and_the_project_opens(tmp_path: Path, files: str, words: str) -> None:
    folder = tmp_path / "project"
    folder.mkdir()
    write(tmp_path, secret=PART % "s")
    write(
        folder, ring='shelf_files = ["back.toml"]', back='shelf_files = ["ring.toml"]', own='shelf_files = ["own.toml"]'
    )
    write(folder, broken="[a]\nb =\n[c]\nd =\n")
    (folder / "out.toml").symlink_to("../secret.toml")
    (folder / "sub").mkdir()
    os.mkfifo(folder / "pipe")
    loaded = load(folder, files)
    assert loaded.document.data
    assert loaded.problems
    for problem in loaded.problems:
        assert problem.error
        assert problem.path == ("shelf_files",)
        assert problem.sentence().isprintable()
    assert words in " ".join(p.sentence() for p in loaded.problems)
    assert all("secret" not in str(s.data) for s in loaded.shelves)


def test_an_unknown_key_of_a_shelf_file_is_told_once(tmp_path: Path) -> None:
    write(tmp_path, a="format = 1\nnote = 'x'\n[bus]\nlow = 1\n")
    (problem,) = load(tmp_path, '["a.toml", "a.toml"]').problems
    assert (problem.error, problem.source, problem.place) == (False, "a.toml", "bus")


def test_too_many_shelf_files(tmp_path: Path) -> None:
    names = [f"s{n}" for n in range(store.MAX_SHELVES + 2)]
    write(tmp_path, **dict.fromkeys(names, ""))
    loaded = load(tmp_path, str([f"{n}.toml" for n in names]))
    assert len(loaded.shelves) == store.MAX_SHELVES
    assert len(loaded.problems) == 2


@pytest.mark.parametrize("files", ["5", "'x'", "[5]", "{}", "[[]]"])
def test_wrong_types_of_shelf_files_are_left_to_the_build(tmp_path: Path, files: str) -> None:
    assert load(tmp_path, files).shelves == ()


def test_copied_shelves(tmp_path: Path) -> None:
    one, two = tmp_path / "one", tmp_path / "two"
    one.mkdir()
    two.mkdir()
    write(one, a=PART % "a", parts__b=PART % "b")
    (one / "parts" / "b.toml").write_bytes(b"\xef\xbb\xbfx = 1\r\n")
    names = ["a.toml", "parts/b.toml", "gone.toml"]
    store.copy_shelves(names, one, two)
    store.copy_shelves(names, one, two)  # the same again
    assert (two / "parts" / "b.toml").read_bytes() == b"\xef\xbb\xbfx = 1\r\n"
    (two / "a.toml").unlink()
    (two / "parts" / "b.toml").write_text("x = 2\n")
    with pytest.raises(ProjectError, match="another"):
        store.copy_shelves(names, one, two)
    assert not (two / "a.toml").exists()  # nothing was written


def test_folders_that_cannot_be_made(tmp_path: Path) -> None:
    one, two = tmp_path / "one", tmp_path / "two"
    one.mkdir()
    two.mkdir()
    write(one, parts__b="")
    (two / "parts").touch()
    with pytest.raises(ProjectError):
        store.copy_shelves(["parts/b.toml"], one, two)


# -- the text of a new project


def test_the_starter_reads_back_and_saves_unchanged(tmp_path: Path) -> None:
    store.write_text(tmp_path / "new.toml", starter())
    loaded = store.load(tmp_path / "new.toml")
    assert store.render(loaded.document).text == starter()
    assert loaded.document.data == tomllib.loads(starter())

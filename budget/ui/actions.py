"""The commands: one function each, by the names of the command table. They change the desk or the document."""

from __future__ import annotations

import copy
import os
from collections.abc import Callable
from pathlib import Path as FilePath
from typing import Any

from budget.engine.model import LINES
from budget.project import document as doc
from budget.project import edits, schema, starter
from budget.project.document import Path
from budget.project.problems import ProjectError, place, printable
from budget.project.store import ChangedOnDiskError, NotWrittenError, free_name, put_copy, same_place
from budget.session import ReadOnlyError
from budget.ui import asking, lists, recovery, searching, sharing, studies, trying
from budget.ui.desk import Desk, Pick, command_items
from budget.ui.sheet import rows_of
from budget.ui.view import Cell, Row

Action = Callable[[Desk], None]


def _move(where: str) -> Action:
    return lambda desk: desk.move(where)


def _show(view: str) -> Action:
    def show(desk: Desk) -> None:
        desk.view_name = view

    return show


# -- editing a cell


def edit(desk: Desk) -> None:
    row, cell = desk.here()
    if desk.view_name == "allocation":
        searching.enter(desk)
        return
    if cell.path is None:
        if cell.leads is not None:
            desk.back.append(desk.spot())
            desk.go_to(cell.leads)
        elif row is not None and desk.view_name != "help":
            desk.say("this cell cannot be typed into")
        return
    spec = edits.spec_at(cell.path)
    assert spec is not None
    path, session = cell.path, desk.session
    choices: list[str] | None = None
    if spec.kind == schema.CHOICE:
        choices = list(spec.choices)
    elif spec.kind == schema.FILTER:
        choices = [*edits.ids(session.document, "filter"), ""]
    elif spec.kind == schema.PART:
        choices = [*edits.shelf_names(session.document, session.shelves, str(path[0])), ""]
    if choices is None:
        desk.start_edit()
        return
    now = edits.typed(edits.value_at(session.document, session.shelves, path)[0])
    items = [(name or "(none)", name) for name in choices]
    at = choices.index(now) if now in choices else 0
    desk.pick(spec.help, items, lambda value: desk._enter(path, value), at)


def _cell(desk: Desk) -> Path:
    _, cell = desk.here()
    if cell.path is None:
        raise ProjectError("this cell is calculated; it cannot be changed.")
    return cell.path


def empty(desk: Desk) -> None:
    path = _cell(desk)
    desk.change(_label(desk, path, "emptied"), edits.clear(desk.session.document, path))


def _label(desk: Desk, path: Path, what: str) -> str:
    return f"{place(desk.session.document, path)} {what}"


def copy_cell(desk: Desk) -> None:
    _, cell = desk.here()
    text = cell.text
    if cell.path is not None:
        value, _ = edits.value_at(desk.session.document, desk.session.shelves, cell.path)
        text = edits.typed(value)
    desk.cell_clip = text
    desk.clip(text)
    desk.say(f"copied: {text[:60]}" if text else "copied an empty cell")


def cut_cell(desk: Desk) -> None:
    copy_cell(desk)
    empty(desk)


def paste_cell(desk: Desk) -> None:
    desk._enter(_cell(desk), desk.cell_clip)


def fill(desk: Desk) -> None:
    """Take the value of the cell above, if it is one of the same kind."""
    path = _cell(desk)
    lines, at = desk.lines(), desk.row_index()
    spec = edits.spec_at(path)
    for _, row in reversed(lines[:at]):
        if row is None or len(row.cells) <= desk.cursor.column:
            continue
        above = row.cells[desk.cursor.column].path
        if above is not None and edits.spec_at(above) is spec:
            value, _ = edits.value_at(desk.session.document, desk.session.shelves, above)
            desk._enter(path, edits.typed(value))
            desk.move("down")
            return
    raise ProjectError("there is no cell of the same kind above.")


def undo(desk: Desk) -> None:
    step = desk.session.undo(desk.spot())
    if step is None:
        raise ProjectError("there is nothing to undo.")
    desk.stand_at(step.spot)
    desk.changed(f"undone: {step.label}")


def redo(desk: Desk) -> None:
    step = desk.session.redo(desk.spot())
    if step is None:
        raise ProjectError("there is nothing to redo.")
    desk.stand_at(step.spot)
    desk.changed(f"done again: {step.label}")


# -- rows


def _stand_on(desk: Desk, key: tuple[Any, ...]) -> None:
    desk.cursor.key = key
    desk.cursor.index = -1


def new(desk: Desk) -> None:
    session = desk.session
    document = session.document
    row, cell = desk.here()
    item = desk.item()
    spot = desk.spot()
    if desk.view_name == "shelf":
        _new_part(desk, row)
        return
    if desk.view_name == "allocation":
        searching.new_wish(desk)
        return
    in_list = row is not None and len(row.key) > len(edits.owner(row.key)) and not _plain(row.key)
    if desk.view_name in ("fields", "rules", "limits") and row is not None and in_list:
        changed, path = edits.new_item(document, session.shelves, _list_path(row, cell))
        desk.change(_label(desk, path, "added"), changed, spot)
        _stand_on(desk, path)
        return
    if desk.view_name == "loads":
        at = int(item[1]) + 1 if item and len(item) > 1 else len(rows_of(document, "case"))
        changed, path = edits.new_row(document, "case", at)
        desk.change("new load case", changed, spot)
        desk.cursor.column = at + 1
        return
    if desk.view_name == "limits":
        at = int(item[1]) + 1 if item and len(item) > 1 else len(rows_of(document, "limit"))
        changed, path = edits.new_row(document, "limit", at)
        desk.change("new limit line", changed, spot)
        _stand_on(desk, (*path, "name"))
        return
    if desk.view_name != "sheet":
        raise ProjectError("new rows are made in the sheet, the load cases, the lists of a row, or the shelf.")
    if item == ("bus",):
        new_filter(desk)
        return
    home, at = "", len(rows_of(document, "converter"))
    if item and item[0] == "filter":
        home = str(doc.get(document, (*item, "id"), ""))
    elif item:
        home, at = str(doc.get(document, (*item, "filter"), "")), int(item[1]) + 1
    changed, path = edits.new_row(document, "converter", at, filter=home)
    desk.change(f"new converter {doc.get(changed, (*path, 'id'))}", changed, spot)
    _stand_on(desk, path)
    desk.cursor.column = 0


def _plain(path: Path) -> bool:
    """Whether a row is one field with one value, and so no list that could have one more item."""
    spec = edits.spec_at(path)
    return spec is not None and spec.kind not in schema.NESTED and len(path) == len(edits.owner(path)) + 1


def _list_path(row: Row, cell: Cell) -> Path:
    """The list or item that a new item goes to: the row's own place."""
    return cell.item if cell.item and len(cell.item) > len(edits.owner(cell.item)) else row.key


def _new_part(desk: Desk, row: Row | None) -> None:
    kind = "converter" if row is not None and len(row.key) > 1 and row.key[1] == "converter" else "filter"

    def choose(key: str) -> None:
        desk.prompt(f"name of the new {key} part", "", lambda name: make(key, name))

    def make(key: str, name: str) -> None:
        name = name.strip()
        if not name or not name.isprintable() or len(name) > 40:
            raise ProjectError("a short name for the part was expected.")
        if name in edits.shelf_names(desk.session.document, desk.session.shelves, key):
            raise ProjectError(f"'{name}' is on the shelf already.")
        part = {k: v for k, v in starter.ROWS[key].items() if k not in ("id", "name", "filter")}
        changed = doc.put(desk.session.document, ("shelf", key, name), copy.deepcopy(part))
        desk.change(f"new shelf part {name}", changed)
        _stand_on(desk, ("shelf", key, name, "this file"))

    desk.pick("a part for", [("a filter", "filter"), ("a converter", "converter")], choose, int(kind == "converter"))


def _copy_part(desk: Desk, path: Path) -> None:
    """A part of this file or of a shelf file, copied into this file under a new name."""
    session, key, old = desk.session, str(path[1]), str(path[2])
    part = edits.shelf_part(session.document, session.shelves, path)

    def make(name: str) -> None:
        name = name.strip()
        if not name or not name.isprintable() or len(name) > 40:
            raise ProjectError("a short name for the part was expected.")
        if name in edits.shelf_names(session.document, session.shelves, key):
            raise ProjectError(f"'{name}' is on the shelf already.")
        desk.change(f"new shelf part {name}", doc.put(session.document, ("shelf", key, name), copy.deepcopy(part)))
        _stand_on(desk, ("shelf", key, name, "this file"))

    desk.prompt(f"name of the copy of {old}, in this file", f"{old}-2", make)


def new_filter(desk: Desk) -> None:
    document, item, spot = desk.session.document, desk.item(), desk.spot()
    rows = rows_of(document, "filter")
    at = int(item[1]) + 1 if item and item[0] == "filter" else len(rows)
    changed, path = edits.new_row(document, "filter", at)
    desk.change(f"new filter {doc.get(changed, (*path, 'id'))}", changed, spot)
    _stand_on(desk, path)
    desk.cursor.column = 0


def _item(desk: Desk) -> Path:
    item = desk.item()
    if item is None or len(item) < 2:
        raise ProjectError("there is no row here that can be copied, moved or removed.")
    return item


def _owned(desk: Desk, item: Path) -> doc.Document:
    """The document in which the list of ``item`` belongs to its row, also if the shelf lent it before."""
    return edits.own(desk.session.document, desk.session.shelves, item)


def _whole(desk: Desk, item: Path) -> Any:
    value = doc.get(_owned(desk, item), item)
    if value is None:
        raise ProjectError("there is no row here.")
    return copy.deepcopy(value)


def _loads(desk: Desk, item: Path) -> dict[str, Any]:
    """What the cases ask of a converter: it goes along when its row is copied."""
    return edits.loads_of(desk.session.document, item) if len(item) == 2 and item[0] == "converter" else {}


def duplicate(desk: Desk) -> None:
    row, _ = desk.here()
    if desk.view_name == "shelf" and row is not None and len(row.key) == 4:
        _copy_part(desk, row.key[:3])
        return
    item, spot = _item(desk), desk.spot()
    value = _whole(desk, item)
    if isinstance(item[-1], str):
        raise ProjectError("only rows of a list can be duplicated.")
    place = (*item[:-1], item[-1] + 1)
    changed, path = edits.insert_row(_owned(desk, item), place, value, _loads(desk, item))
    desk.change(f"duplicated {_named(value)}", changed, spot)
    _after_insert(desk, path)


def _named(value: Any) -> str:
    return str(value.get("id") or value.get("name") or "row") if isinstance(value, dict) else "row"


def _after_insert(desk: Desk, path: Path) -> None:
    if path[0] == "case":
        desk.cursor.column = int(path[1]) + 1
    elif path[0] == "limit" and len(path) == 2:
        _stand_on(desk, (*path, "name"))
    else:
        _stand_on(desk, path)


def remove(desk: Desk) -> None:
    if desk.view_name == "allocation":
        searching.remove_wish(desk)
        return
    item, spot = _item(desk), desk.spot()
    value = _whole(desk, item)
    if isinstance(item[-1], str):
        changed = doc.drop(desk.session.document, item)
        if item[0] == "shelf" and _users(desk, item):
            raise ProjectError(f"{item[2]} is used by {', '.join(_users(desk, item))}; let them go first.")
    else:
        changed = edits.remove_row(_owned(desk, item), item)
    desk.change(f"removed {_named(value) if isinstance(item[-1], int) else item[-1]}", changed, spot)
    if item[0] == "case":
        desk.cursor.column = max(1, desk.cursor.column - 1)
    else:
        desk.cursor.key = ()  # the row that has its number now may stand elsewhere; the line stays


def _users(desk: Desk, item: Path) -> list[str]:
    rows = rows_of(desk.session.document, str(item[1]))
    return [str(r.get("id", "?")) for _, r in rows if r.get("part") == item[2]]


def copy_row(desk: Desk) -> None:
    item = _item(desk)
    if isinstance(item[-1], str):
        raise ProjectError("only rows of a list can be copied.")
    desk.row_clip = (_shape(item), _whole(desk, item), _loads(desk, item))
    desk.say(f"row copied: {_named(desk.row_clip[1])}; V puts it after a row")


def _shape(item: Path) -> str:
    """What kind of row an item is; rows of one shape can be pasted among each other."""
    key = str(item[-2])
    return "ladder" if key in ("dm", "cm", "input") else key


def cut_row(desk: Desk) -> None:
    copy_row(desk)
    remove(desk)


def paste_row(desk: Desk) -> None:
    if desk.row_clip is None:
        raise ProjectError("no row was copied; C copies one.")
    shape, value, loads = desk.row_clip
    session, spot = desk.session, desk.spot()
    item = desk.item()
    row, _ = desk.here()
    document = session.document
    value = copy.deepcopy(value)
    if shape in ("converter", "filter") and desk.view_name == "sheet":
        at = len(rows_of(document, shape))
        if item and item[0] == shape:
            at = int(item[1]) + 1
        if shape == "converter" and item and item[0] == "filter":
            value["filter"] = doc.get(document, (*item, "id"), "")
        elif shape == "converter" and item and item[0] == "converter":
            value["filter"] = doc.get(document, (*item, "filter"), "")
        path: Path = (shape, at)
    elif shape in ("case", "limit") and desk.view_name in ("loads", "limits"):
        at = int(item[1]) + 1 if item and len(item) > 1 else len(rows_of(document, shape))
        path = (shape, at)
    else:
        target = item if item and len(item) > 2 else (row.key if row else ())
        spec = edits.spec_at(target[: len(edits.owner(target)) + 1]) if target else None
        key = "ladder" if spec is not None and spec.kind == schema.LADDER else (spec.key if spec else "")
        if spec is None or key != shape:
            raise ProjectError(f"the copied row is one of {shape}; it does not fit here.")
        document = _owned(desk, (*target[: len(edits.owner(target)) + 1], 0))
        base = target[: len(edits.owner(target)) + 1]
        at = int(target[len(base)]) + 1 if len(target) > len(base) else 0
        path = (*base, at)
    changed, path = edits.insert_row(document, path, value, loads)
    desk.change(f"pasted {_named(value)}", changed, spot)
    _after_insert(desk, path)


def _reorder(step: int) -> Action:
    def go(desk: Desk) -> None:
        item, spot = _item(desk), desk.spot()
        if isinstance(item[-1], str):
            raise ProjectError("only rows of a list can be moved.")
        to = item[-1] + step
        if item[0] == "converter" and len(item) == 2:  # next to its neighbour behind the same filter
            home = doc.get(desk.session.document, (*item, "filter"), "")
            same = [i for i, r in rows_of(desk.session.document, "converter") if r.get("filter", "") == home]
            n = same.index(item[-1]) + step
            to = same[n] if 0 <= n < len(same) else -1
        document = _owned(desk, item)
        length = len(doc.get(document, item[:-1], []))
        if not 0 <= to < length:
            raise ProjectError("this row is the first already." if step < 0 else "this row is the last already.")
        desk.change(f"moved {_named(doc.get(document, item))}", doc.move(document, item, to), spot)
        _after_insert(desk, (*item[:-1], to))

    return go


def _subject(desk: Desk) -> Path | None:
    """What a command about a whole row acts on: among the fields of a row, that row."""
    return desk.item() or (desk.subject if desk.view_name == "fields" else None)


def rename(desk: Desk) -> None:
    item = _subject(desk)
    if item is not None and item[0] == "shelf" and len(item) == 3:
        part = item
        desk.prompt(
            f"new name of the part {item[2]}", str(part[2]), lambda name: _rename_part(desk, part, name.strip())
        )
        return
    row, _ = desk.here()
    if row is not None and row.key[:1] == ("load",):
        item = next((p for p in _converters(desk) if doc.get(desk.session.document, (*p, "id")) == row.key[1]), item)
        if desk.cursor.column > 0 and desk.item():
            item = desk.item()
    if item is None or len(item) < 2 or item[0] not in ("filter", "converter", "case", "limit"):
        raise ProjectError("there is no id here to rename.")
    base = item[:2]
    key = "name" if base[0] == "limit" else "id"
    old = str(doc.get(desk.session.document, (*base, key), ""))

    def accept(text: str) -> None:
        changed = edits.rename(desk.session.document, (*base, key), text.strip())
        desk.change(f"renamed {old} to {text.strip()}", changed)

    desk.prompt(f"new id for {old}, everywhere", old, accept)


def _converters(desk: Desk) -> list[Path]:
    return [("converter", i) for i, _ in rows_of(desk.session.document, "converter")]


def _rename_part(desk: Desk, item: Path, name: str) -> None:
    key, old = str(item[1]), str(item[2])
    if not name or not name.isprintable() or len(name) > 40:
        raise ProjectError("a short name for the part was expected.")
    if name in edits.shelf_names(desk.session.document, desk.session.shelves, key):
        raise ProjectError(f"'{name}' is on the shelf already.")
    document = desk.session.document
    named = doc.get(document, ("shelf", key))
    document = doc.put(document, ("shelf", key), {(name if k == old else k): v for k, v in named.items()})
    for index, row in rows_of(document, key):
        if row.get("part") == old:
            document = doc.put(document, (key, index, "part"), name)
    desk.change(f"renamed part {old} to {name}", document)
    _stand_on(desk, ("shelf", key, name, "this file"))


# -- filters and parts


def _converter(desk: Desk) -> Path:
    item = _subject(desk)
    if item is None or item[0] != "converter":
        raise ProjectError("this is for converters; the cursor is not on one.")
    return item[:2]


def _to_neighbour(step: int) -> Action:
    def go(desk: Desk) -> None:
        path = _converter(desk)
        names = ["", *edits.ids(desk.session.document, "filter")]
        now = doc.get(desk.session.document, (*path, "filter"), "")
        at = names.index(now) if now in names else 0
        if len(names) < 2:
            raise ProjectError("there is no filter yet; N makes one.")
        order = [*names[1:], ""]  # as they stand in the sheet: what is not allocated comes last
        at = order.index(now) if now in order else len(order) - 1
        to = at + step
        if not 0 <= to < len(order):
            raise ProjectError("there is no filter beyond this one." if step > 0 else "there is no filter above.")
        _put_behind(desk, path, order[to])

    return go


def _put_behind(desk: Desk, path: Path, ident: str) -> None:
    document, spot = desk.session.document, desk.spot()
    name = doc.get(document, (*path, "id"), "?")
    label = f"{name} behind {ident}" if ident else f"{name} behind no filter"
    desk.change(label, edits.to_filter(document, int(path[1]), ident), spot)
    desk.cursor.key = path


def to_filter(desk: Desk) -> None:
    path = _converter(desk)
    names = [*edits.ids(desk.session.document, "filter"), ""]
    now = doc.get(desk.session.document, (*path, "filter"), "")
    items = [(name or "(none: draws nothing)", name) for name in names]
    at = names.index(now) if now in names else 0
    desk.pick("put it behind which filter?", items, lambda name: _put_behind(desk, path, name), at)


def take_part(desk: Desk) -> None:
    item = _subject(desk)
    if item is None or item[0] not in schema.SHELVES:
        raise ProjectError("parts are for filters and converters.")
    path: Path = (*item[:2], "part")
    names = [*edits.shelf_names(desk.session.document, desk.session.shelves, str(item[0])), ""]
    items = [(name or "(none)", name) for name in names]
    desk.pick("a part from the shelf; fields entered here stay", items, lambda name: desk._enter(path, name))


# -- showing


def view_sheet(desk: Desk) -> None:
    desk.back.clear()
    desk.view_name = "sheet"


def go_back(desk: Desk) -> None:
    """End the calculation that runs; with none, go to where a cell led from, else to the sheet."""
    if desk.stop_job():
        return
    if desk.back:
        desk.stand_at(desk.back.pop())
    else:
        desk.view_name = "sheet"


def find(desk: Desk) -> None:
    def go(path: Path) -> None:
        if desk.view_name == "fields":
            desk.subject = path
            return
        desk.view_name = "sheet"
        desk.cursor.key = path

    desk.pick("go to", lists.subjects(desk.context()), go)


def corner(desk: Desk) -> None:
    result = desk.session.result
    if result is None:
        raise ProjectError("there are no results yet to choose from.")
    items: list[tuple[str, Any]] = [("worst over all cases and lines", None)]
    for case in result.project.cases:
        items += [(f"{case.id}, {line} line", (case.id, line)) for line in LINES]

    def take(value: Any) -> None:
        desk.corner = value

    at = next((k for k, (_, value) in enumerate(items) if value == desk.corner), 0)
    desk.pick("show which corner?", items, take, at)


def worst(desk: Desk) -> None:
    desk.corner = None


def view_fields(desk: Desk) -> None:
    row, cell = desk.here()
    item = desk.item()
    if desk.view_name == "checks" and cell.leads:
        item = edits.owner(cell.leads)
    if row is not None and row.key[:1] == ("load",):
        item = next((p for p in _converters(desk) if doc.get(desk.session.document, (*p, "id")) == row.key[1]), None)
    if item is not None and item[0] in ("bus", "filter", "converter", "shelf"):
        desk.subject = edits.owner(item)
    desk.view_name = "fields"


def show_commands(desk: Desk) -> None:
    desk.pick("all commands", command_items(), desk.run)


def read(desk: Desk) -> None:
    """All about the cell and the whole message, also what the lines below the grid have no room for."""
    from budget.ui import told

    lines = told.everything(desk)
    if not lines:
        raise ProjectError("there is nothing to say about this cell.")
    desk.pick("at full length", [(line, None) for line in lines], lambda _: None)
    assert isinstance(desk.mode, Pick)
    desk.mode.text = True


# -- the file


def save(desk: Desk) -> None:
    _save(desk, lambda: None)


def _save(desk: Desk, then: Callable[[], None]) -> None:
    """Save, asking first where the file on disk is no longer the one that was read; then go on."""
    session = desk.session
    if session.path is None:
        save_as(desk, then)
        return

    def write(over: bool) -> None:
        notes = session.save(over=over)
        desk.say(" ".join([f"saved {session.name}", *notes]))
        then()

    try:
        write(False)
    except ReadOnlyError:
        sharing.ask_where(desk, lambda: save_as(desk, then), lambda: _reload(desk))
    except ChangedOnDiskError:
        _ask_changed(desk, write, then)
    except NotWrittenError as error:
        raise ProjectError(f"{error} W saves under another name.") from error


def _reload(desk: Desk) -> None:
    desk.session.reload(desk.spot())
    desk.changed("reloaded from disk; undo brings yours back")


def _ask_changed(desk: Desk, write: Callable[[bool], None], then: Callable[[], None]) -> None:
    session = desk.session
    assert session.path is not None

    def keep_copy() -> None:
        copy_path = free_name(session.path or FilePath("copy.toml"), "mine")
        session.copy_to(copy_path)
        desk.say(f"yours was saved as {copy_path.name}; {session.name} is untouched")
        then()

    def overwrite() -> None:
        assert session.path is not None
        kept = ""
        if os.path.lexists(session.path):
            other = free_name(session.path, "theirs")
            put_copy(session.path, other)
            kept = f"; the other version is kept as {other.name}"
        write(True)
        desk.say(f"saved {session.name}{kept}")

    options: dict[str, tuple[str, Callable[[], None]]] = {
        "c": ("save yours as a copy", keep_copy),
        "o": ("overwrite, keeping theirs as a copy", overwrite),
    }
    if os.path.isfile(session.path):
        options = {"r": ("reload theirs", lambda: _reload(desk)), **options}
    desk.ask(f"{session.name} {session.on_disk()}.", options)


def save_as(desk: Desk, then: Callable[[], None] = lambda: None) -> None:
    start = str(desk.session.path or "project.toml")

    def accept(text: str) -> None:
        if not text.strip():
            raise ProjectError("a file name was expected.")
        try:
            path = FilePath(text.strip()).expanduser()
        except RuntimeError as error:
            raise ProjectError(f"the home folder in {printable(text.strip(), 60)} is not known.") from error
        if os.path.isdir(path):
            raise ProjectError(f"{path} is a folder; a file name was expected.")
        if not os.path.isdir(path.parent):
            raise ProjectError(f"the folder {path.parent} does not exist.")
        if desk.session.path is not None and same_place(path, desk.session.path):
            desk.mode = None
            _save(desk, then)
            return

        def write(over: bool) -> None:
            notes = desk.session.save_as(path, over=over)
            desk.say(" ".join([f"saved {path}", *notes]))
            then()

        if os.path.lexists(path):
            desk.mode = None
            desk.ask(f"{path} exists already.", {"o": ("overwrite it", lambda: write(True))})
            return
        write(False)

    desk.prompt("save as", start, accept)


def quit_program(desk: Desk) -> None:
    if not desk.session.dirty:
        desk.leave()
        return
    desk.ask(
        "There is unsaved work.",
        {"s": ("save and quit", lambda: _save(desk, desk.leave)), "d": ("discard it and quit", desk.leave)},
    )


def view_response(desk: Desk) -> None:
    view_fields(desk)
    desk.view_name = "response"


# What a command does in one view in place of what it does elsewhere.
OF_VIEW: dict[tuple[str, str], Action] = {
    ("trials", "edit"): trying.switch,
    ("trials", "new"): trying.hold_as,
    ("trials", "remove"): trying.forget,
    ("recovered", "edit"): recovery.decide,
    **asking.OF_VIEW,
}
ACTIONS: dict[str, Action] = {
    **studies.ACTIONS,
    **searching.ACTIONS,
    **asking.ACTIONS,
    "hold": trying.hold,
    "view_trials": _show("trials"),
    "view_recovered": recovery.view_recovered,
    **{name: _move(name) for name in ("up", "down", "left", "right", "first", "last", "page_up", "page_down")},
    **{f"view_{name}": _show(name) for name in ("rules", "loads", "checks", "limits", "shelf", "project")},
    "view_sheet": view_sheet,
    "go_back": go_back,
    "view_faults": _show("faults"),
    "help": _show("help"),
    "edit": edit,
    "empty": empty,
    "undo": undo,
    "redo": redo,
    "copy": copy_cell,
    "cut": cut_cell,
    "paste": paste_cell,
    "fill": fill,
    "find": find,
    "new": new,
    "new_filter": new_filter,
    "duplicate": duplicate,
    "remove": remove,
    "copy_row": copy_row,
    "cut_row": cut_row,
    "paste_row": paste_row,
    "earlier": _reorder(-1),
    "later": _reorder(1),
    "rename": rename,
    "filter_up": _to_neighbour(-1),
    "filter_down": _to_neighbour(1),
    "to_filter": to_filter,
    "take_part": take_part,
    "corner": corner,
    "worst": worst,
    "view_fields": view_fields,
    "view_spectrum": _show("spectrum"),
    "view_plan": _show("plan"),
    "view_response": view_response,
    "view_allocation": _show("allocation"),
    "view_switchon": _show("switchon"),
    "view_stable": _show("stable"),
    "commands": show_commands,
    "read": read,
    "save": save,
    "save_as": save_as,
    "quit": quit_program,
}

"""The lines of a journal: each is the checksum of one JSON object, and the object.

The first line is the header: what the project was when the journal began, and whose it is. Each other line is one event
with its number, so that a line that is missing, torn or damaged is noticed whatever it looks like.
"""

from __future__ import annotations

import base64
import json
import tomllib
import zlib
from pathlib import Path as FilePath
from typing import Any

from budget import __version__
from budget.keeping.patch import PatchError, applied, difference
from budget.keeping.places import Owner
from budget.project.document import Document, from_data
from budget.project.store import MAX_BYTES

FORMAT = 1
LONGEST = 16 * MAX_BYTES  # bytes of one line; a longer one is none of ours
Record = dict[str, Any]


class JournalError(ValueError):
    """A journal that cannot be read; ``str()`` says why, without the file's name."""


def encode(record: Record) -> bytes:
    """A record as a line of ASCII."""
    body = json.dumps(record, separators=(",", ":"), allow_nan=False).encode("ascii")
    return b"%08x %s\n" % (zlib.crc32(body), body)


def decode(line: bytes) -> Record | None:
    """The record of a line; None where the line is torn or damaged."""
    if not line.endswith(b"\n") or line[8:9] != b" " or len(line) > LONGEST:
        return None
    body = line[9:-1]
    try:
        if int(line[:8], 16) != zlib.crc32(body):
            return None
        record = json.loads(body)
    except (ValueError, RecursionError):
        return None
    return record if isinstance(record, dict) else None


def header(document: Document, path: FilePath | None, digest: str | None, clean: bool, now: float) -> Record:
    """What stands at the start: the document the first event changes, the file it came from and that file's digest.

    ``clean`` says that the document is what the file holds. Costs a compression of the text.
    """
    text = base64.b64encode(zlib.compress(document.text.encode("utf-8", "surrogatepass"))).decode()
    return {
        "journal": FORMAT,
        "path": str(path.absolute()) if path is not None else None,
        "digest": digest,
        "clean": clean,
        "when": now,
        "program": __version__,
        "text": text,
        "patch": difference(parsed(document.text), document),
    }


def parsed(text: str) -> Document:
    """The document of a text as it was read, with a row for each of its rows."""
    return from_data(tomllib.loads(text.removeprefix("\ufeff")), text)


def base(head: Record) -> Document:
    """The document that the first event changes. Raises JournalError."""
    if head.get("journal") != FORMAT:
        raise JournalError(f"it is of version {str(head.get('journal'))[:20]}, and this program reads version {FORMAT}")
    try:
        unpacker = zlib.decompressobj()
        raw = unpacker.decompress(base64.b64decode(head["text"]), 2 * MAX_BYTES)
        if unpacker.unconsumed_tail:
            raise JournalError("the project in it is too large")
        return applied(parsed(raw.decode("utf-8", "surrogatepass")), head["patch"])
    except JournalError:
        raise
    except (KeyError, TypeError, ValueError, zlib.error, RecursionError, PatchError) as error:
        raise JournalError("its first line has no project") from error


def signed(record: Record, owner: Owner) -> Record:
    """A record with the process that wrote it."""
    return {
        **record,
        "host": owner.host,
        "user": owner.user,
        "pid": owner.pid,
        "born": owner.born,
        "locked": owner.locked,
    }


def owner_of(record: Record) -> Owner:
    """The process that signed a record."""
    pid = record.get("pid")
    texts = [str(record.get(key, "")) for key in ("host", "user", "born")]
    return Owner(texts[0], texts[1], pid if isinstance(pid, int) else 0, texts[2], record.get("locked") is True)

"""Esc and a key right behind it stay two keys, although a terminal sends the same for Alt with that key.

textual takes them for one (Esc and f for Ctrl+Right, Esc and 5 for a sign of another keyboard), or drops the Esc
(before Enter, Space, a comma). So an Esc that opens no sequence is passed on as that of the Esc key, and acts at
once; only one that nothing follows yet is waited with. In a paste no Esc is a key: there they are left out.
"""

from __future__ import annotations

ESC = "\x1b"
OPENS = "[O"  # what makes a sequence of the Esc before it
KEY = "[27u"  # behind an Esc: the Esc key
PASTE, END_OF_PASTE = "\x1b[200~", "\x1b[201~"


class Escapes:
    """What a terminal sends, with every Esc by itself closed off; it comes in pieces of any size."""

    def __init__(self) -> None:
        self._after = False  # an Esc was passed on, and nothing behind it yet
        self._last = ""
        self._pasting = False
        self._held = ""  # in a paste: what may be the beginning of its end

    def __call__(self, data: str) -> str:
        out: list[str] = []
        for character in data:
            (self._in_paste if self._pasting else self._in_keys)(character, out)
        return "".join(out)

    def _in_keys(self, character: str, out: list[str]) -> None:
        if self._after and character not in OPENS:
            out.append(KEY)
        out.append(character)
        self._after = character == ESC
        self._last = (self._last + character)[-len(PASTE) :]
        self._pasting = self._last == PASTE

    def _in_paste(self, character: str, out: list[str]) -> None:
        if not self._held and character != ESC:
            out.append(character)
            return
        if not END_OF_PASTE.startswith(self._held + character):
            out.append(self._held[1:])
            self._held = ""
            if character != ESC:
                out.append(character)
                return
        self._held += character
        if self._held == END_OF_PASTE:
            out.append(self._held)
            self._held, self._pasting, self._last = "", False, ""

    def waited(self) -> None:
        """Nothing came behind the last Esc for long enough: it was the key."""
        self._after = False

"""From the bytes that a terminal sends to keys as `monitor.views.control` names them."""

import codecs

# how long a lone Escape may be the start of something longer, in seconds; a slow link cuts sequences
ESCAPE_WAIT_S = 0.05

_CONTROL = {0x0D: "Enter", 0x0A: "Enter", 0x09: "Tab", 0x7F: "Backspace", 0x08: "Backspace", 0x20: "Space"}
_SEQUENCES = {
    "[A": "Up",
    "[B": "Down",
    "[C": "Right",
    "[D": "Left",
    "OA": "Up",
    "OB": "Down",
    "OC": "Right",
    "OD": "Left",
    "OP": "F1",
    "OM": "Enter",
    "[11~": "F1",
    "[5~": "PageUp",
    "[6~": "PageDown",
    "[[A": "F1",
}
_PASTE, _PASTE_END = "[200~", "[201~"
_LONGEST = 64


class Keys:
    """Takes bytes as they come, however they are cut, and gives keys.

    A key is a character, or a name: Space, Enter, Backspace, Tab, Escape, Up, Down, Left, Right, PageUp, PageDown, F1, Ctrl+ with a letter.
    Unknown sequences and bytes that are no UTF-8 give nothing. What was pasted gives ``("paste", text)`` and never a key.
    """

    def __init__(self) -> None:
        self._decoder = codecs.getincrementaldecoder("utf-8")("ignore")
        self._escape: str | None = None
        self._paste: str | None = None

    @property
    def waiting(self) -> bool:
        """Whether a lone Escape waits for what may follow; after ESCAPE_WAIT_S call `settle`."""
        return self._escape == ""

    def feed(self, data: bytes) -> list[str | tuple[str, str]]:
        """The keys that are complete with these bytes."""
        keys: list[str | tuple[str, str]] = []
        for character in self._decoder.decode(data):
            key = self._take(character)
            if key is not None:
                keys.append(key)
        return keys

    def settle(self) -> list[str | tuple[str, str]]:
        """Nothing followed: a lone Escape was the key."""
        if not self.waiting:
            return []
        self._escape = None
        return ["Escape"] if self._paste is None else []

    def _take(self, character: str) -> str | tuple[str, str] | None:
        if self._escape is not None:
            return self._in_sequence(character)
        if character == "\x1b":
            self._escape = ""
            return None
        if self._paste is not None:
            self._paste += character
            return None
        return _key(character)

    def _in_sequence(self, character: str) -> str | tuple[str, str] | None:
        if character == "\x1b":  # the first Escape stood alone
            lone, self._escape = self._escape == "", ""
            return "Escape" if lone and self._paste is None else None
        sequence = (self._escape or "") + character
        if sequence in ("[", "O", "[[") or (
            sequence.startswith("[") and len(sequence) < _LONGEST and not "@" <= character <= "~"
        ):
            self._escape = sequence
            return None
        self._escape = None
        if sequence == _PASTE:
            self._paste = ""
            return None
        if self._paste is not None:
            if sequence != _PASTE_END:
                return None
            text, self._paste = self._paste, None
            return ("paste", text)
        if len(sequence) == 1:  # Alt with a key: not the key
            return None
        return _SEQUENCES.get(sequence)


def _key(character: str) -> str | None:
    code = ord(character)
    if code in _CONTROL:
        return _CONTROL[code]
    if 1 <= code <= 26:
        return f"Ctrl+{chr(code + 64)}"
    return character if character.isprintable() else None

"""Text from elsewhere: which characters it may hold, and how what it holds is shown."""

from __future__ import annotations

import json
import re

# Characters that do something instead of being seen: they move a terminal's cursor, reverse the order of what follows,
# hide within a name, or are no characters at all (halves of them, reserved codes). Ordinary white space is not among
# them, nor are the joiners that some scripts need.
_UNSEEN = re.compile(
    "[\x00-\x08\x0b-\x1f\x7f-\x9f\u061c\u200b\u200e\u200f\u2028-\u202e\u2060-\u206f\ufeff\ufff9-\ufffb\ufffe\uffff"
    "\ud800-\udfff\U000e0000-\U000e007f]"
)


def unseen(text: str) -> str | None:
    """The first character in a text that cannot be seen, as its code (U+202E); None if all can."""
    found = _UNSEEN.search(text)
    return f"U+{ord(found[0]):04X}" if found else None


def printable_json(text: str) -> str:
    """A JSON document that means the same and holds no such character as itself."""
    return _UNSEEN.sub(lambda found: json.dumps(found[0])[1:-1], text)


def plain(text: str) -> str:
    """The text as it may be shown on a terminal: what cannot be seen is replaced by its code."""
    return _UNSEEN.sub(lambda found: f"<U+{ord(found[0]):04X}>", text)

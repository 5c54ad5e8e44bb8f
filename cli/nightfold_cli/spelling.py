"""Signs that an output cannot hold, spelled with those that it can."""

from __future__ import annotations

import codecs
import unicodedata

_SPELLED = {
    "±": "+-",
    "×": "x",
    "µ": "u",
    "μ": "u",
    "–": "-",
    "−": "-",
    "°": "deg",
    "·": "*",
    "≥": ">=",
    "≤": "<=",
    "↑": "^",
    "↓": "v",
}
HANDLER = "nightfold-spelled"


def spelled(text: str, encoding: str | None) -> str:
    """Return the text as an output of that encoding will show it."""
    if text.isascii() or encoding is None:
        return text
    return text.encode(encoding, errors=HANDLER).decode(encoding)


def _spell(error: UnicodeError) -> tuple[str | bytes, int]:
    """Return what stands in place of signs that cannot be encoded: their letters without accents, else ``?``."""
    if not isinstance(error, UnicodeEncodeError):
        raise error
    signs = error.object[error.start : error.end]
    return "".join(map(_sign, signs)), error.end


def _sign(sign: str) -> str:
    """Return one sign in ASCII."""
    if sign in _SPELLED:
        return _SPELLED[sign]
    plain = unicodedata.normalize("NFKD", sign).encode("ascii", errors="ignore").decode("ascii")
    return plain or "?"


codecs.register_error(HANDLER, _spell)

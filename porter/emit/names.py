"""Identifiers and comments: what may pass from a spec into a source file, and in which form."""

import keyword
import re
import unicodedata

# C99 (ISO/IEC 9899:1999, 6.4.1) and the macros of <stdbool.h>.
_C_WORDS = frozenset(
    """
    auto break case char const continue default do double else enum extern float for goto if inline int long
    register restrict return short signed sizeof static struct switch typedef union unsigned void volatile
    while _Bool _Complex _Imaginary bool true false asm
    """.split()  # noqa: SIM905 - reads as the standard lists them
)
# Files beside the core, and modules that MicroPython's pin layer imports.
_TAKEN = frozenset("main board boot machine micropython time utime sys usys os uos gc stdint stdbool".split())  # noqa: SIM905

_ASCII = {
    "µ": "u",
    "μ": "u",
    "Ω": "ohm",
    "\u2126": "ohm",
    "±": "+-",
    "×": "x",
    "·": "*",
    "−": "-",
    "–": "-",
    "—": "-",
    "≤": "<=",
    "≥": ">=",
    "→": "->",
    "°": "deg ",
    "²": "^2",
    "√": "sqrt",
    "τ": "tau",
    "…": "...",
}


def identifier(text: str) -> str:
    """Return *text* as an identifier that is free in both C and Python, such as ``lamp_latch``."""
    word = re.sub(r"_+", "_", re.sub(r"[^0-9A-Za-z]", "_", ascii_text(text))).strip("_") or "x"
    word = f"n{word}" if word[0].isdigit() else word
    clash = word in _C_WORDS or keyword.iskeyword(word) or keyword.issoftkeyword(word) or word in _TAKEN
    return f"{word}_port" if clash else word


def unique(texts: tuple[str, ...]) -> tuple[str, ...]:
    """Return upper-case words for names, told apart by a number where two would be the same."""
    words: list[str] = []
    for text in texts:
        plain = re.sub(r"_+", "_", re.sub(r"[^0-9A-Za-z]", "_", ascii_text(text))).strip("_").upper() or "X"
        word, count = plain, 1
        while word in words:
            count += 1
            word = f"{plain}_{count}"
        words.append(word)
    return tuple(words)


def camel(name: str) -> str:
    """Return ``LampLatch`` for ``lamp_latch``."""
    return "".join(part[:1].upper() + part[1:] for part in name.split("_"))


def ascii_text(text: str) -> str:
    """Return *text* in ASCII: units and signs spelt out, accents dropped, the rest as ``?``."""
    text = "".join(_ASCII.get(char, char) for char in text)
    return unicodedata.normalize("NFKD", text).encode("ascii", "replace").decode().replace("??", "?")


def comment(text: str) -> str:
    """Return *text* as one line that can end neither a C comment, nor a Python string, nor its own line.

    Trigraphs (``??/``), comment marks, backslashes, quotes in threes and control characters are taken out.
    """
    line = re.sub(r"[\x00-\x1f\x7f\s]+", " ", ascii_text(text)).strip()
    line = re.sub(r"\?+", "?", re.sub(r"\"{2,}", '"', line.replace("\\", "/")))
    return re.sub(r"/[/\*]+|\*+/", lambda found: " ".join(found[0]), line)


def string(text: str) -> str:
    """Return *text* as the inside of a string literal of C or Python."""
    return comment(text).replace('"', "'")

"""The words of a formula: text to tokens, and the error that points into the text."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass

from lattice.errors import FormulaError

# Limits that no law comes near and that keep hostile text from costing time.
CHARACTERS_AT_MOST = 4000
TOKENS_AT_MOST = 1000
NAME_AT_MOST = 40
DIGITS_AT_MOST = 40
EXPONENT_AT_MOST = 99

_WINDOW = 88

_PATTERN = re.compile(
    r"(?P<space>[ \t\r\n]+)"
    r"|(?P<number>(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)"
    r"|(?P<name>[A-Za-z][A-Za-z0-9_]*)"
    r"|(?P<subscript>_[A-Za-z0-9_]*)"
    r"|(?P<symbol>\*\*|==|[-+*/()=])"
)

_INSTEAD = {
    "^": "write ** for a power",
    "\u2212": "write the plain minus -",
    "\u2013": "write the plain minus -",
    "\u00d7": "write * for a product",
    "\u00b7": "write * for a product",
    "\u00b2": "write **2",
    "\u00b3": "write **3",
    "[": "write ( )",
    "]": "write ( )",
    "{": "write ( )",
    "}": "write ( )",
    "\u2202": "write a derivative as a subscript, u_xx",
    "\u2207": "write lap(u) for the Laplacian",
    "\u0394": "write lap(u) for the Laplacian",
    "\u03c0": "write pi",
}


@dataclass(frozen=True)
class Token:
    """One word of a formula: its kind (number, name, subscript, symbol, end), text and offset."""

    kind: str
    text: str
    position: int


def refuse(message: str, text: str, position: int) -> FormulaError:
    """Return the error that shows the part of `text` around `position` with a pointer below it."""
    start = max(0, min(position - _WINDOW // 2, len(text) - _WINDOW))
    part = text[start : start + _WINDOW]
    shown = "".join(c if c.isprintable() and c.isascii() else " " if c.isspace() else "?" for c in part)
    return FormulaError(message, shown, position - start)


def split_tokens(text: str) -> list[Token]:
    """Return the tokens of `text`, an `end` token last.

    Raises
    ------
    FormulaError
        For text that is too long, characters outside the notation, names or numbers beyond the limits.
    """
    if len(text) > CHARACTERS_AT_MOST:
        raise FormulaError(
            f"a formula must have at most {CHARACTERS_AT_MOST} characters, got {len(text)}; shorten it"
        )
    tokens: list[Token] = []
    position = 0
    while position < len(text):
        match = _PATTERN.match(text, position)
        if match is None:
            raise refuse(_foreign(text[position]), text, position)
        if match.lastgroup != "space":
            tokens.append(Token(str(match.lastgroup), match.group(), position))
            _check_size(tokens, text)
        position = match.end()
    return [*tokens, Token("end", "the end", len(text))]


def _foreign(character: str) -> str:
    name = unicodedata.name(character, "control character").lower()
    shown = repr(character) if character.isascii() else f"U+{ord(character):04X}"
    remedy = _INSTEAD.get(character, "use letters a-z, digits, _ + - * / ** ( ) =")
    return f"a formula must not contain {shown} ({name}); {remedy}"


def _check_size(tokens: list[Token], text: str) -> None:
    token = tokens[-1]
    if len(tokens) > TOKENS_AT_MOST:
        raise refuse(f"a formula must have at most {TOKENS_AT_MOST} words; shorten it", text, token.position)
    if token.kind == "name" and len(token.text) > NAME_AT_MOST:
        raise refuse(
            f"a name must have at most {NAME_AT_MOST} characters, got {len(token.text)}; shorten it",
            text,
            token.position,
        )
    if token.kind == "number":
        _check_number(token, text)


def _check_number(token: Token, text: str) -> None:
    mantissa, _, exponent = token.text.lower().partition("e")
    digits = len(mantissa.replace(".", ""))
    if digits > DIGITS_AT_MOST:
        message = f"a number must have at most {DIGITS_AT_MOST} digits, got {digits}; shorten it"
        raise refuse(message, text, token.position)
    # The length first: turning a very long string of digits into an int takes long.
    if len(exponent.lstrip("+-0")) > 2:
        message = f"a number must have an exponent of at most {EXPONENT_AT_MOST}; rescale the formula"
        raise refuse(message, text, token.position)

"""The linear algebra of rules and aims: text to exact coefficients, and back.

A small recursive-descent parser of our own; nothing is ever evaluated as code. The grammar::

    rule    = sum relation sum [relation sum]        relation = "<=" | ">=" | "="
    sum     = product {("+" | "-") product}
    product = factor {("*" | "/") factor}
    factor  = {"+" | "-"} (number | name | "(" sum ")")

While parsing, a value is a number, or a dict from activity index to coefficient with the constant
under the key `CONSTANT`.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from fractions import Fraction
from typing import NamedTuple, NoReturn

from intplan.errors import SheetError, excerpt, unknown
from intplan.sheet.names import is_stem, normal
from intplan.sheet.numbers import (
    UNSIGNED,
    Number,
    NumberError,
    check_spread,
    fit,
    lowest,
    short_enough,
    show,
    unsigned_number,
)

Terms = tuple[tuple[int, Number], ...]
Value = Number | dict[int, Number]

CONSTANT = -1
MOST_NESTED = 64
RELATIONS = ("<=", ">=", "=")

_LETTER = r"[A-Za-z_]|[^\x00-\x7f\s]"
_PART = r"(?:[A-Za-z0-9_-]|[^\x00-\x7f\s])+"
_TOKEN = re.compile(
    rf"\s*(?:(?P<name>(?:{_LETTER})(?:{_LETTER}|[0-9])*(?:\[{_PART}(?:,{_PART})*\])?)"
    rf"|(?P<number>{UNSIGNED})"
    r"|(?P<sign>\*\*|//|[-+*/()])"
    r"|(?P<relation>[<>=!]+)"
    r"|(?P<end>$)"
    r"|(?P<other>.))",
    re.DOTALL,
)
_INSTEAD = {
    "\u2264": "<=",
    "\u2265": ">=",
    "\u2a7d": "<=",
    "\u2a7e": ">=",
    "\u2212": "-",
    "\u2013": "-",
    "\u2014": "-",
    "\u00d7": "*",
    "\u00b7": "*",
    "\u22c5": "*",
    "\u2219": "*",
    "\u2217": "*",
    "\u00f7": "/",
    "\u2215": "/",
    "\u2044": "/",
    "{": "(",
    "}": ")",
}
_RELATION_INSTEAD = {
    "<": "<=",
    ">": ">=",
    "==": "=",
    "===": "=",
    "=<": "<=",
    "=>": ">=",
    "<==": "<=",
    ">==": ">=",
}
_NOT_LINEAR = "is not linear; a rule may only multiply or divide an activity by a number"


class ParsedRule(NamedTuple):
    """A rule with every activity on the left and every number on the right.

    Attributes
    ----------
    terms : (activity index, coefficient) pairs, merged, without zeros, sorted by index
    least, most : the limits, None where there is none
    holds : for a rule of constants only, whether it is true; None for any other
    """

    terms: Terms
    least: Number | None
    most: Number | None
    holds: bool | None


class _Token(NamedTuple):
    kind: str
    text: str
    place: int


def parse_rule(text: str, index: Mapping[str, int], where: str) -> ParsedRule:
    """Read a rule.

    Parameters
    ----------
    text : such as ``6 <= 0.01*loaf + 0.02*roll_tray <= 9``
    index : activity name to index
    where : the place, for errors

    Raises
    ------
    SheetError
        Malformed, non-linear, an undeclared name, or limits that contradict each other.
    """
    parser = _Parser(text, index, where)
    sides = [parser.sum(0)]
    relations: list[_Token] = []
    while parser.token.kind == "relation":
        relations.append(parser.relation(relations))
        sides.append(parser.sum(0))
    parser.expect_end()
    if not relations:
        parser.fail("a rule needs a relation: <=, >= or =", parser.token)
    return _Settling(parser, relations).rule(sides)


def parse_aim(text: str, index: Mapping[str, int], where: str) -> tuple[Terms, Number]:
    """Read an aim: a sum without a relation. Returns its terms and its constant.

    Parameters and errors are those of `parse_rule`.
    """
    parser = _Parser(text, index, where)
    value = parser.sum(0)
    if parser.token.kind == "relation":
        parser.fail("an aim is a sum, without a relation", parser.token)
    parser.expect_end()
    terms, constant = _split(value)
    try:
        _fit_all(terms, [])
        fit(constant)
    except NumberError as problem:
        raise SheetError(f"{problem}", where) from None
    return terms, constant


def parse_limits(text: str, name: str, where: str) -> tuple[Number | None, Number | None]:
    """Read new limits for what is called `name`: ``<= 14``, ``name <= 14``, ``2 <= name <= 5``.

    Returns
    -------
    least, most : None where the text sets none

    Raises
    ------
    SheetError
        The text is not of that form.
    """
    if text.lstrip().startswith(("<", ">", "=")):
        text = f"{name} {text.lstrip()}"
    rule = parse_rule(text, {name: 0}, where)
    if rule.terms != ((0, 1),):
        raise SheetError(f"write the new limits as {name} <= 14 or 2 <= {name} <= 5", where)
    return rule.least, rule.most


def tokens(text: str) -> list[_Token]:
    """Cut a text into tokens, the last of kind ``end``."""
    found = []
    for match in _TOKEN.finditer(text):
        kind = match.lastgroup or "end"
        found.append(_Token(kind, match[kind], match.start(kind)))
        if kind == "end":
            break
    return found


class _Parser:
    """One text on its way to a value, with the token at hand."""

    def __init__(self, text: str, index: Mapping[str, int], where: str) -> None:
        self.text = normal(text)
        self.index = index
        self.where = where
        self.tokens = tokens(self.text)
        self.at = 0
        self.token = self.tokens[0]
        if self.token.kind == "end":
            raise SheetError("the text is empty", where)

    def step(self) -> None:
        self.at += 1
        self.token = self.tokens[self.at]

    def fail(self, message: str, token: _Token) -> NoReturn:
        """Raise an error that points at a token."""
        before = self.text[: token.place]
        column = token.place - before.rfind("\n")
        place = f"column {column}"
        if "\n" in self.text.strip():
            lines = before.count("\n") + 1
            place = f"line {lines} of the text, column {column}"
        rest = self.text[token.place :].strip()
        at = f"at {excerpt(rest)}" if rest else f"at the end of {excerpt(self.text.strip())}"
        raise SheetError(f"{place}: {message} ({at})", self.where) from None

    def check(self, value: Number, token: _Token) -> Number:
        """Return a computed number in lowest terms unless it has grown out of bounds."""
        try:
            return short_enough(lowest(value))
        except NumberError as problem:
            self.fail(str(problem), token)

    def sum(self, depth: int) -> Value:
        """Read a sum into a number or a dict of its own."""
        total: dict[int, Number] = {CONSTANT: 0}
        first = self.token
        negative = False
        while True:
            value = self.product(depth)
            for j, c in value.items() if isinstance(value, dict) else ((CONSTANT, value),):
                old = total.get(j)
                new = (-c if negative else c) if old is None else old - c if negative else old + c
                total[j] = new if type(new) is int else self.check(new, first)
            token = self.token
            if token.text not in ("+", "-"):
                break
            negative = token.text == "-"
            self.step()
        return total if any(c for j, c in total.items() if j != CONSTANT) else total[CONSTANT]

    def product(self, depth: int) -> Value:
        """Read factors and multiply them, at most one of which holds activities."""
        value = self.factor(depth)
        while self.token.kind == "sign" and self.token.text in ("*", "/"):
            sign = self.token
            self.step()
            factor = self.factor(depth)
            if sign.text == "/":
                value = self.divide(value, factor, sign)
            else:
                value = self.multiply(value, factor, sign)
        return value

    def multiply(self, left: Value, right: Value, sign: _Token) -> Value:
        if isinstance(left, dict):
            if isinstance(right, dict):
                self.fail(f"a product of activities {_NOT_LINEAR}", sign)
            left, right = right, left
        if isinstance(right, dict):
            return {j: left if c == 1 else self.check(left * c, sign) for j, c in right.items()}
        return self.check(left * right, sign)

    def divide(self, left: Value, right: Value, sign: _Token) -> Value:
        if isinstance(right, dict):
            self.fail(f"a division by an activity {_NOT_LINEAR}", sign)
        if right == 0:
            self.fail("a division by zero", sign)
        return self.multiply(left, lowest(1 / Fraction(right)), sign)

    def factor(self, depth: int) -> Value:
        """Read a number, a name or a sum in parentheses, with any signs before it."""
        negative = False
        while self.token.text in ("+", "-"):
            negative ^= self.token.text == "-"
            self.step()
        token = self.token
        value: Value
        if token.kind == "name":
            value = {self.activity(token): 1}
        elif token.kind == "number":
            value = self.number(token)
        elif token.text == "(":
            value = self.parentheses(depth)
        else:
            self.unexpected("a number, a name or ( is missing")
        if token.text != "(":
            self.step()
        if self.token.kind in ("name", "number") or self.token.text == "(":
            self.side_by_side(token)
        if not negative:
            return value
        return {j: -c for j, c in value.items()} if isinstance(value, dict) else -value

    def parentheses(self, depth: int) -> Value:
        """Read a sum in parentheses, up to and with the closing one."""
        opening = self.token
        if depth >= MOST_NESTED:
            self.fail(f"parentheses nested more than {MOST_NESTED} deep", opening)
        self.step()
        value = self.sum(depth + 1)
        if self.token.text != ")":
            if self.token.kind == "end":
                self.fail("this parenthesis is never closed", opening)
            if self.token.kind == "relation":
                self.fail("a relation cannot stand inside parentheses", self.token)
            self.unexpected("an operator or ) is missing")
        self.step()
        return value

    def activity(self, token: _Token) -> int:
        """Return the index of the activity that a token names."""
        found = self.index.get(token.text)
        if found is not None:
            return found
        self.check_signs(token)
        after = self.tokens[self.at + 1]
        if after.text == "[":
            self.strange(after)
        message = unknown("name", token.text, self.index)
        if token.text.lower() in ("inf", "infinity", "nan"):
            message = f"{token.text} has no place in algebra; leave out a limit that is not there"
        self.fail(message, token)

    def check_signs(self, token: _Token) -> None:
        """Point at the first character of a would-be name that cannot be part of one."""
        plain = token.text.translate({ord(c): "_" for c in "[],-0123456789"})
        for k, c in enumerate(plain):
            if not is_stem("_" + c):
                self.strange(token._replace(text=c, place=token.place + k))

    def strange(self, token: _Token) -> NoReturn:
        """Refuse a character that algebra does not know, with the right one where it is plain."""
        c = token.text
        if c in _INSTEAD:
            self.fail(f'"{c}" is not understood here; write {_INSTEAD[c]}', token)
        if c in "[]":
            self.fail(
                "brackets hold an index right behind a name, of letters, digits, _ and -, with"
                " commas but no spaces between its parts, as in build[loaf,week-2]",
                token,
            )
        if c in ("^", "**", "\u00b2", "\u00b3"):
            self.fail(f"a power {_NOT_LINEAR}", token)
        if c == ",":
            self.fail('"," is not understood here; decimals take a point, thousands no mark', token)
        if c == "%":
            self.fail('"%" is not understood here; write 5% as 0.05', token)
        self.fail(f"{excerpt(c)} is not understood here", token)

    def number(self, token: _Token) -> Number:
        try:
            return unsigned_number(token.text)
        except NumberError as problem:
            self.fail(str(problem), token)

    def side_by_side(self, before: _Token) -> NoReturn:
        """Refuse two factors with no operator between them."""
        token = self.token
        if token.kind == "name":
            self.check_signs(token)
        if before.kind == "number" and token.text in self.index:
            times = f"{before.text[:20]}*{token.text[:40]}"
            self.fail(f"an operator is missing; a product is written {times}", token)
        self.fail("an operator is missing", token)

    def relation(self, before: Sequence[_Token]) -> _Token:
        """Return the relation at hand if it may follow those before it, and pass it."""
        token = self.token
        if token.text not in RELATIONS:
            instead = _RELATION_INSTEAD.get(token.text)
            hint = f"write {instead}" if instead else "the relations are <=, >= and ="
            self.fail(f'"{token.text}" is not a relation of rules; {hint}', token)
        if len(before) == 2:
            self.fail("a rule has one relation, or a chain of two; write two rules", token)
        if before and (before[0].text == "=" or token.text == "="):
            self.fail("= cannot be part of a chain; write two rules", token)
        if before and before[0].text != token.text:
            self.fail(
                "the two relations of a chain point the same way, as in 2 <= a + b <= 5;"
                " write two rules",
                token,
            )
        self.step()
        return token

    def expect_end(self) -> None:
        if self.token.text == ")":
            self.fail("this parenthesis was never opened", self.token)
        if self.token.kind != "end":
            self.unexpected("an operator is missing")

    def unexpected(self, message: str) -> NoReturn:
        """Refuse the token at hand, in the words that fit it best."""
        token = self.token
        if token.kind == "other" or token.text == "**":
            self.strange(token)
        if token.text == "//":
            self.fail('"//" is not understood here; write /', token)
        self.fail(message, token)


class _Settling:
    """Moves activities to the left and numbers to the right, once both sides are read."""

    def __init__(self, parser: _Parser, relations: Sequence[_Token]) -> None:
        self.parser = parser
        self.relations = relations

    def rule(self, sides: list[Value]) -> ParsedRule:
        try:
            terms, least, most = self.move(sides)
            _fit_all(terms, [v for v in (least, most) if v is not None])
        except NumberError as problem:
            raise SheetError(str(problem), self.parser.where) from None
        holds = None
        if not terms:
            holds = (least is None or least <= 0) and (most is None or most >= 0)
        elif least is not None and most is not None and least > most:
            self.parser.fail(
                f"no value is at least {show(least)} and at most {show(most)}", self.relations[1]
            )
        return ParsedRule(terms, least, most, holds)

    def move(self, sides: list[Value]) -> tuple[Terms, Number | None, Number | None]:
        """Return the terms on the left and the least and most value of their sum."""
        relation = self.relations[0].text
        if len(sides) == 3:
            left, right = self.outer(sides[0], 0), self.outer(sides[2], 1)
            terms, constant = _split(sides[1])
            low, high = (left, right) if relation == "<=" else (right, left)
            return terms, lowest(low - constant), lowest(high - constant)
        terms, constant = _split(_minus(sides[0], sides[1]))
        limit = lowest(-constant)
        return terms, None if relation == "<=" else limit, None if relation == ">=" else limit

    def outer(self, side: Value, position: int) -> Number:
        if isinstance(side, dict):
            self.parser.fail(
                "the outer parts of a chain are numbers; with activities there, write two rules",
                self.relations[position],
            )
        return side


def _minus(left: Value, right: Value) -> Value:
    """Return left - right."""
    total = dict(left) if isinstance(left, dict) else {CONSTANT: left}
    for j, c in right.items() if isinstance(right, dict) else ((CONSTANT, right),):
        total[j] = short_enough(total.get(j, 0) - c)
    return total


def _split(value: Value) -> tuple[Terms, Number]:
    """Return the terms of a value, merged and sorted, and its constant."""
    if not isinstance(value, dict):
        return (), value
    constant = value.get(CONSTANT, 0)
    terms = sorted((j, lowest(c)) for j, c in value.items() if c and j != CONSTANT)
    return tuple(terms), lowest(constant)


def _fit_all(terms: Terms, limits: list[Number]) -> None:
    for _, c in terms:
        fit(c)
    for value in limits:
        fit(value)
    check_spread([c for _, c in terms], limits)


def write_sum(terms: Terms, names: Sequence[str], constant: Number = 0) -> str:
    """Return algebra for a sum, which reads back as the same terms.

    Parameters
    ----------
    terms : (index, coefficient) pairs
    names : the name of each index
    constant : added at the end where it is not zero
    """
    parts = []
    for j, c in terms:
        size = -c if c < 0 else c
        factor = "" if size == 1 else show(size) + "*"
        parts.append(("- " if c < 0 else "+ ") + factor + names[j])
    if constant or not parts:
        parts.append(("- " + show(-constant)) if constant < 0 else ("+ " + show(constant)))
    text = " ".join(parts)
    return text[2:] if text.startswith("+ ") else "-" + text[2:]


def write_rule(
    terms: Terms, least: Number | None, most: Number | None, names: Sequence[str]
) -> str:
    """Return algebra for a rule, every activity on the left and every number on the right."""
    body = write_sum(terms, names)
    if least is not None and least == most:
        return f"{body} = {show(most)}"
    if least is not None and most is not None:
        return f"{show(least)} <= {body} <= {show(most)}"
    if least is not None:
        return f"{body} >= {show(least)}"
    return body if most is None else f"{body} <= {show(most)}"

"""Cards as tokens, and a reader that takes them one by one."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass

from modepair.circuits.screening.numbers import NUMBER_START
from modepair.circuits.screening.parsing import NAME, Expression, parse_expression
from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["Reader", "Token", "tokens_of"]

_PIECE = re.compile(r"(?P<word>[^ ,=(){}\[\]'\"]+)|(?P<sign>[,=()\[\]])")
_CLOSING = {"{": "}", "(": ")", "[": "]"}


@dataclass(frozen=True, slots=True)
class Token:
    """A piece of a card.

    Attributes
    ----------
    kind : {"word", "sign", "expression"}
        An expression is what stands in braces or single quotes.
    text : str
        The piece, without braces or quotes.
    begin, end : int
        Its place on the card; `outer_end` lies behind the brace or quote.
    outer_end : int
        Where the next token may begin.
    """

    kind: str
    text: str
    begin: int
    end: int
    outer_end: int


def tokens_of(card: Card) -> list[Token]:
    """Split a card.

    Parameters
    ----------
    card : Card
        The card.

    Returns
    -------
    list of Token
        In order.

    Raises
    ------
    CardError
        For a brace, bracket or quote that is not closed, or closed and not opened.
    """
    text, at = card.text, 0
    found: list[Token] = []
    open_: list[tuple[str, int]] = []
    while at < len(text):
        character = text[at]
        if character == " ":
            at += 1
        elif character == "{":
            end = _brace_end(card, at)
            found.append(Token("expression", text[at + 1 : end], at + 1, end, end + 1))
            at = end + 1
        elif character == "'":
            end = text.find("'", at + 1)
            if end < 0:
                raise CardError(card.place(at), "a quote is not closed; write ' after the expression")
            if "{" in text[at:end] or "}" in text[at:end]:
                raise CardError(
                    card.place(at), "a brace stands inside quotes; write braces or quotes, not both"
                )
            found.append(Token("expression", text[at + 1 : end], at + 1, end, end + 1))
            at = end + 1
        elif match := _PIECE.match(text, at):
            if match[0] in _CLOSING:
                open_.append((match[0], at))
            elif match[0] in ")]" and (not open_ or _CLOSING[open_.pop()[0]] != match[0]):
                raise CardError(
                    card.place(at), f"{match[0]} closes no bracket; remove it, or write the opening one"
                )
            found.append(Token(match.lastgroup or "", match[0], at, match.end(), match.end()))
            at = match.end()
        else:
            why = (
                ": double quotes are for names of files, which no element or model takes"
                if character == '"'
                else ""
            )
            raise CardError(card.place(at), f"{character} does not fit here{why}; remove it")
    if open_:
        raise CardError(card.place(open_[-1][1]), f"a bracket is not closed; write {_CLOSING[open_[-1][0]]}")
    return found


def _brace_end(card: Card, begin: int) -> int:
    depth = 0
    for at in range(begin, len(card.text)):
        depth += (card.text[at] == "{") - (card.text[at] == "}")
        if depth == 0:
            return at
    raise CardError(card.place(begin), "a brace is not closed; write } after the expression")


class Reader:
    """Takes the tokens of one card in order; round brackets and commas between them are passed over.

    Parameters
    ----------
    card : Card
        The card.
    findings : Findings
        Limits, notes.
    """

    def __init__(self, card: Card, findings: Findings) -> None:
        self.card, self.findings = card, findings
        self.tokens = tokens_of(card)
        self.at = 0

    @property
    def place(self) -> Place:
        """Where the next token stands."""
        offset = self.tokens[self.at].begin if self.at < len(self.tokens) else max(0, len(self.card.text) - 1)
        return self.card.place(offset)

    def refused(self, message: str, token: Token | None = None) -> CardError:
        """Return a fault at a token, or at the next one."""
        return CardError(self.card.place(token.begin) if token else self.place, message)

    def note(self, text: str) -> None:
        """Record that something of this card was rewritten."""
        self.findings.note(self.card.place(), text)

    def _pass(self) -> None:
        while (
            self.at < len(self.tokens)
            and self.tokens[self.at].kind == "sign"
            and self.tokens[self.at].text in ",()"
        ):
            self.at += 1

    def peek(self, ahead: int = 0) -> Token | None:
        """Return a token to come, brackets and commas left out, or None."""
        self._pass()
        index, passed = self.at, 0
        while index < len(self.tokens):
            token = self.tokens[index]
            if not (token.kind == "sign" and token.text in ",()"):
                if passed == ahead:
                    return token
                passed += 1
            index += 1
        return None

    def take(self) -> Token | None:
        """Take the next token."""
        token = self.peek()
        if token is not None:
            self.at += 1
        return token

    def at_word(self, *words: str) -> bool:
        """Tell whether the next token is one of some words."""
        token = self.peek()
        return token is not None and token.kind == "word" and token.text in words

    def take_word(self, *words: str) -> bool:
        """Take the next token if it is one of some words."""
        found = self.at_word(*words)
        if found:
            self.take()
        return found

    def take_sign(self, sign: str) -> bool:
        """Take the next token if it is that sign."""
        token = self.peek()
        found = token is not None and token.kind == "sign" and token.text == sign
        if found:
            self.take()
        return found

    def name(self, what: str) -> str:
        """Take a name.

        Parameters
        ----------
        what : str
            What is named, with its article, for the message.

        Returns
        -------
        str
            Lower case.
        """
        token = self.peek()
        if token is None:
            raise self.refused(f"{what} is missing; write it")
        self.at += 1
        if token.kind != "word" or not NAME.fullmatch(token.text):
            raise self.refused(
                f"{shown(token.text)} stands where {what} belongs, of letters, digits and _ . + - /", token
            )
        if len(token.text) > 64:
            raise self.refused(
                f"{shown(token.text)} is too long a name; at most 64 characters are read", token
            )
        return token.text

    def nodes(self, count: int) -> tuple[str, ...]:
        """Take `count` node names."""
        return tuple(self.node() for _ in range(count))

    def node(self) -> str:
        """Take a node name."""
        name = self.name("a node")
        if name != "0" and not name.strip("0"):
            raise self.refused(
                f"node {name} looks like ground and is not; write 0, or another name",
                self.tokens[self.at - 1],
            )
        return name

    def value(self, what: str) -> Expression:
        """Take a number, or an expression in braces or quotes."""
        token = self.peek()
        if token is None:
            raise self.refused(f"{what} is missing; write a number")
        self.at += 1
        if token.kind == "sign":
            raise self.refused(f"{token.text} stands where {what} belongs; write a number", token)
        if token.kind == "word" and not NUMBER_START.match(token.text):
            remedy = (
                f"write {{{token.text}}} for a parameter" if NAME.fullmatch(token.text) else "write a number"
            )
            raise self.refused(f"{shown(token.text)} stands where {what} belongs; {remedy}", token)
        return parse_expression(self.card, token.begin, token.end, self.findings)

    def expression(self, what: str) -> Expression:
        """Take an expression in braces or quotes, or in round brackets after an equals sign."""
        equals = self.tokens[self.at].text == "=" if self.at < len(self.tokens) else False
        if equals:
            self.at += 1
        token = self.tokens[self.at] if self.at < len(self.tokens) else None
        if token is not None and token.kind == "expression":
            self.at += 1
            return parse_expression(self.card, token.begin, token.end, self.findings)
        if token is not None and token.text == "(" and equals:
            begin, depth = self.at, 0
            while self.at < len(self.tokens):
                text = self.tokens[self.at].text if self.tokens[self.at].kind == "sign" else ""
                depth += (text == "(") - (text == ")")
                self.at += 1
                if depth == 0:
                    break
            return parse_expression(
                self.card, self.tokens[begin].end, self.tokens[self.at - 1].begin, self.findings
            )
        raise self.refused(f"{what} is missing; write it in braces, such as {{2*V(a,b)}}")

    def rest(self, what: str) -> Expression:
        """Take everything that is left as one expression."""
        if self.at >= len(self.tokens):
            raise self.refused(f"{what} is missing; write it in braces")
        begin = self.tokens[self.at].begin - (self.tokens[self.at].kind == "expression")
        self.at = len(self.tokens)
        return parse_expression(self.card, begin, len(self.card.text), self.findings)

    def pairs(self, free: bool = False) -> Iterator[tuple[Token, Expression]]:
        """Take all that is left as ``name = value`` pairs.

        Parameters
        ----------
        free : bool
            Whether a value may be an expression without braces.

        Yields
        ------
        tuple of Token and Expression
            The name's token and its value.
        """
        names: set[str] = set()
        while (token := self.take()) is not None:
            if token.kind != "word" or not re.fullmatch("[a-z_][a-z0-9_]*", token.text):
                raise self.refused(
                    f"{shown(token.text)} stands where a parameter's name belongs; write name=value", token
                )
            if token.text in names:
                raise self.refused(
                    f"{token.text} is given twice; programs take one or the other; keep one", token
                )
            names.add(token.text)
            if not self.take_sign("="):
                raise self.refused(f"{shown(token.text)} has no value; write {token.text}=value", token)
            yield token, self._free_value(token) if free else self.value(f"the value of {token.text}")

    def _free_value(self, name: Token) -> Expression:
        begin = self.at
        end = begin
        while end < len(self.tokens) and not (
            end > begin
            and end + 1 < len(self.tokens)
            and self.tokens[end].kind == "word"
            and self._is_equals(end + 1)
        ):
            end += 1
        last = end
        while last > begin and self.tokens[last - 1].text == "," and self.tokens[last - 1].kind == "sign":
            last -= 1
        if last == begin:
            raise self.refused(f"{name.text} has no value; write {name.text}=value", name)
        self.at = end
        first, final = self.tokens[begin], self.tokens[last - 1]
        offset = first.begin - (first.kind == "expression")
        quoted = first.kind == "expression" and self.card.text[offset] == "'"
        if first.kind == "expression" and last == begin + 1:
            return parse_expression(self.card, first.begin, first.end, self.findings)
        if quoted:
            raise self.refused("an expression goes on after its quote; put all of it in braces", first)
        return parse_expression(self.card, offset, final.outer_end, self.findings)

    def _is_equals(self, index: int) -> bool:
        """Tell whether a token is an equals sign of its own, not part of ``==``."""
        token = self.tokens[index]
        doubled = [i for i in (index - 1, index + 1) if i < len(self.tokens) and self.tokens[i].text == "="]
        return token.kind == "sign" and token.text == "=" and not doubled

    def end(self) -> None:
        """Refuse what is left of the card."""
        token = self.peek()
        if token is not None:
            raise self.refused(
                f"{shown(token.text)} is left over; programs read such a card in different ways; remove it",
                token,
            )

"""Limits of a model file: how much of it is read, and how deep."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Limits"]


@dataclass(frozen=True)
class Limits:
    """What a model file may cost before it is refused.

    Attributes
    ----------
    file_bytes : int
        Size of one file.
    total_bytes : int
        Size of the file and of all it includes.
    files : int
        Files read, the first one counted.
    include_depth : int
        Files that include files, counted from the first one.
    card_length : int
        Characters of one card, its continuation lines joined.
    cards : int
        Cards of all files.
    ports : int
        Ports of one subcircuit.
    subcircuit_depth : int
        Subcircuits inside subcircuits, as definitions and as instances.
    expression_depth : int
        Terms inside terms, in an expression as written and with its functions put in.
    expression_size : int
        Terms of an expression with its functions put in.
    work : int
        Steps of putting in functions and parameters, over the whole file.
    instances : int
        Different pairs of a subcircuit and its parameter values.
    elements : int
        Elements of one subcircuit with everything inside it put in.
    faults : int
        Faults that are gathered before reading stops.
    """

    file_bytes: int = 1_000_000
    total_bytes: int = 4_000_000
    files: int = 32
    include_depth: int = 8
    card_length: int = 60_000
    cards: int = 50_000
    ports: int = 200
    subcircuit_depth: int = 24
    expression_depth: int = 32
    expression_size: int = 20_000
    work: int = 200_000
    instances: int = 2_000
    elements: int = 20_000
    faults: int = 200

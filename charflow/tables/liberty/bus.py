"""Pins such as ``D[0]``, ``D[1]`` as the bus they are bits of: readers know a bit from its bus group only."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, field

from charflow.tables.liberty.syntax import Block, Simple

_BIT = re.compile(r"([A-Za-z_]\w*)\[(\d{1,4})\]")


@dataclass
class BusTypes:
    """The bus types of one library: each width and order of bits has one name."""

    names: dict[tuple[int, int], str] = field(default_factory=dict)

    def name(self, first: int, last: int) -> str:
        """Return the type of a bus that runs from bit ``first`` to bit ``last``."""
        return self.names.setdefault((first, last), f"bits_{first}_to_{last}")

    def blocks(self) -> tuple[Block, ...]:
        """Return the type groups, in the order of first use."""
        return tuple(
            Block(
                "type",
                (name,),
                (
                    Simple("base_type", "array"),
                    Simple("data_type", "bit"),
                    Simple("bit_width", float(abs(last - first) + 1)),
                    Simple("bit_from", float(first)),
                    Simple("bit_to", float(last)),
                    Simple("downto", first > last),
                ),
            )
            for (first, last), name in self.names.items()
        )


def with_buses(pins: Iterable[Block], types: BusTypes) -> tuple[Block, ...]:
    """Return ``pins`` with the bits of each whole bus inside a bus group, at the place of the first.

    A bus is whole where its bits leave none out and have one direction; the others stay pins.
    """
    pins = list(pins)
    bits: dict[str, dict[int, Block]] = {}
    for pin in pins:
        match = _BIT.fullmatch(pin.argument)
        if match is not None:
            bits.setdefault(match[1], {})[int(match[2])] = pin
    alone = {pin.argument for pin in pins}
    whole = {name: found for name, found in bits.items() if name not in alone and _whole(found)}
    items: list[Block] = []
    for pin in pins:
        match = _BIT.fullmatch(pin.argument)
        if match is None or match[1] not in whole:
            items.append(pin)
        elif pin is next(iter(whole[match[1]].values())):
            items.append(_bus(match[1], whole[match[1]], types))
    return tuple(items)


def _whole(found: dict[int, Block]) -> bool:
    directions = {pin.text("direction") for pin in found.values()}
    return len(found) == max(found) - min(found) + 1 and len(directions) == 1


def _bus(name: str, found: dict[int, Block], types: BusTypes) -> Block:
    order = list(found)
    first, last = (max(order), min(order)) if order[0] > order[-1] else (min(order), max(order))
    direction = next(iter(found.values())).text("direction")
    head = (Simple("bus_type", types.name(first, last)), Simple("direction", direction))
    return Block("bus", (name,), (*head, *found.values()))


def pin_blocks(cell: Block) -> tuple[Block, ...]:
    """Return the pin groups of a cell, those inside bus groups among them."""
    return tuple(
        pin
        for block in cell.blocks("pin", "bus")
        for pin in ((block,) if block.name == "pin" else block.blocks("pin"))
    )

"""Pictures drawn from the tables: the frame byte by byte, the displayed states and what leads from one to another."""

from __future__ import annotations

from protobench.contract.frame import Layout
from protobench.contract.model import Contract

WORD = 4
CELL = 16


def byte_chart(layout: Layout) -> str:
    """Return the frame's layout, four bytes to a line, offsets at the left."""
    rule = "     +" + "+".join(["-" * (CELL - 1)] * WORD) + "+"
    lines = ["      " + " ".join(f"{f'byte {number}':^{CELL - 1}}" for number in range(WORD)).rstrip(), rule]
    row: list[str] = []
    start = used = 0
    for field in layout.field:
        if field.offset % WORD + field.size > WORD:
            raise ValueError(f"{field.name} crosses a line of {WORD} bytes")
        row.append(f"{field.name:^{CELL * field.size - 1}}")
        used += field.size
        if used == WORD:
            lines += [f"{start:>4} |" + "|".join(row) + "|", rule]
            row, used, start = [], 0, start + WORD
    whole = CELL * WORD - 1
    lines += [f"{start:>4} |{f'body, 0 to {layout.body_size_max} bytes':^{whole}}|", rule]
    lines += [f"     |{'check sequence over every byte before it':^{whole}}|", rule]
    return "\n".join(lines)


def state_diagram(contract: Contract) -> str:
    """Return a Mermaid diagram of the displayed states; an arrow names every input that can lead along it.

    Inputs that leave the displayed state as it is are not drawn.
    """
    table = contract.states
    arrows: dict[tuple[str, str], list[str]] = {}
    for state in table.states:
        for name, after in table.followers(state):
            ends = (table.displayed(state), table.displayed(after))
            names = arrows.setdefault(ends, [])
            if ends[0] != ends[1] and name not in names:
                names.append(name)
    lines = ["stateDiagram-v2", f"    [*] --> {table.displayed(table.initial)}"]
    order = list(contract.enum_values("state"))
    drawn = [ends for ends in arrows if ends[0] != ends[1]]
    drawn.sort(key=lambda ends: [order.index(name) for name in ends])
    lines += [f"    {first} --> {last}: {', '.join(arrows[first, last])}" for first, last in drawn]
    return "\n".join(lines)


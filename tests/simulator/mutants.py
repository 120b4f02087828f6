"""Decks spoilt at random, reproducibly: the same number gives the same deck."""

from __future__ import annotations

import random
import re
from collections.abc import Callable, Sequence
from pathlib import Path

_NUMBER = re.compile(rb"\d+\.?\d*(?:e[+-]?\d+)?", re.IGNORECASE)
_ODD_NUMBERS = b"0 -1 1e99 1e-99 1e999 nan inf 4k7 1M {x} 1,5 --1 1d-3 0x10".split()
_ODD_NUMBERS.append(b"")
_ODD_BYTES = [
    *(bytes([code]) for code in b"{}()'\"=+*$;\\`@.,- \t\n#%^&/<>[]~!?|"),
    *(b"\0", b"\r", b"\xff", b"\xb5", b"\xce\xbc", b"\x0c", b"\x1b", b"//"),
]
_ODD_LINES = b"""
*# shell touch canary
.control
.endc
.end
.ends
.subckt s a b
x9 a b s
.if (1)
.else
.endif
.include mutant.inc
.lib lib/process.lib typical
+
+ 1k
.param a={b}
.param b={a}
* deckgen: input VIN
* deckgen: output d
* deckgen: claim ID(M1) 1m
* deckgen: load
* deckgen: rating M1 VDS 1
* deckgen: polarised C1
.temp 1e9
.options temp=-400
.options defw=0
.model nch nmos level=1 vto=-5 kp=-1
.global d
.ic v(d)=1e9
.nodeset v(d)=x
v9 d 0 0
l9 d 0 1
i9 0 d 1e6
e9 d 0 d 0 1
f9 d 0 v9 1
k9 l1 l2 2
r9 d d 0
b9 d 0 v=v(d)
""".strip().split(b"\n")
_ODD_LINES.append(b".control\nshell touch canary\n.endc")


def mutant(seeds: Sequence[Path], number: int) -> bytes:
    """The deck of that number: one of the seeds, changed in a few places."""
    chance = random.Random(number)
    data = chance.choice(seeds).read_bytes()
    for _ in range(chance.choice([1, 1, 1, 1, 2, 2, 3, 5])):
        data = chance.choice(_CHANGES)(data, chance, seeds)
    return data


Change = Callable[[bytes, random.Random, Sequence[Path]], bytes]


def _flip_a_bit(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
    if not data:
        return data
    place = chance.randrange(len(data))
    return data[:place] + bytes([data[place] ^ 1 << chance.randrange(8)]) + data[place + 1 :]


def _put_in(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
    place = chance.randrange(len(data) + 1)
    return data[:place] + chance.choice(_ODD_BYTES) * chance.choice([1, 1, 1, 2, 50]) + data[place:]


def _cut_out(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
    place = chance.randrange(len(data) + 1)
    return data[:place] + data[place + chance.randint(1, 40) :]


def _cut_short(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
    return data[: chance.randrange(len(data) + 1)]


def _mangle_a_number(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
    numbers = list(_NUMBER.finditer(data))
    if not numbers:
        return data
    found = chance.choice(numbers)
    return data[: found.start()] + chance.choice(_ODD_NUMBERS) + data[found.end() :]


def _of_lines(change: Callable[[list[bytes], random.Random], None]) -> Change:
    def changed(data: bytes, chance: random.Random, _: Sequence[Path]) -> bytes:
        lines = data.split(b"\n")
        change(lines, chance)
        return b"\n".join(lines)

    return changed


def _drop_a_line(lines: list[bytes], chance: random.Random) -> None:
    del lines[chance.randrange(len(lines))]


def _repeat_a_line(lines: list[bytes], chance: random.Random) -> None:
    lines.insert(chance.randrange(len(lines) + 1), chance.choice(lines))


def _swap_lines(lines: list[bytes], chance: random.Random) -> None:
    one, other = chance.randrange(len(lines)), chance.randrange(len(lines))
    lines[one], lines[other] = lines[other], lines[one]


def _add_a_line(lines: list[bytes], chance: random.Random) -> None:
    lines.insert(chance.randrange(len(lines) + 1), chance.choice(_ODD_LINES))


def _swap_words(lines: list[bytes], chance: random.Random) -> None:
    place = chance.randrange(len(lines))
    words = lines[place].split(b" ")
    one, other = chance.randrange(len(words)), chance.randrange(len(words))
    words[one], words[other] = words[other], words[one]
    lines[place] = b" ".join(words)


def _drop_a_word(lines: list[bytes], chance: random.Random) -> None:
    place = chance.randrange(len(lines))
    words = lines[place].split(b" ")
    del words[chance.randrange(len(words))]
    lines[place] = b" ".join(words)


def _capitals(lines: list[bytes], chance: random.Random) -> None:
    place = chance.randrange(len(lines))
    lines[place] = lines[place].swapcase()


def _take_a_line_from_elsewhere(data: bytes, chance: random.Random, seeds: Sequence[Path]) -> bytes:
    lines = data.split(b"\n")
    lines.insert(
        chance.randrange(len(lines) + 1), chance.choice(chance.choice(seeds).read_bytes().split(b"\n"))
    )
    return b"\n".join(lines)


def _take_a_word_from_elsewhere(data: bytes, chance: random.Random, seeds: Sequence[Path]) -> bytes:
    words = data.split(b" ")
    words[chance.randrange(len(words))] = chance.choice(chance.choice(seeds).read_bytes().split() or [b""])
    return b" ".join(words)


_CHANGES: tuple[Change, ...] = (
    _flip_a_bit,
    _put_in,
    _cut_out,
    _cut_short,
    _mangle_a_number,
    _mangle_a_number,
    _of_lines(_drop_a_line),
    _of_lines(_repeat_a_line),
    _of_lines(_swap_lines),
    _of_lines(_add_a_line),
    _of_lines(_add_a_line),
    _of_lines(_swap_words),
    _of_lines(_drop_a_word),
    _of_lines(_capitals),
    _take_a_line_from_elsewhere,
    _take_a_word_from_elsewhere,
)

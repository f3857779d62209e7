"""What does a number of a provider's quality raster say about the cell?"""

from __future__ import annotations

import re
from functools import cache, lru_cache

import numpy as np

from firnlight.core.errors import InputProblem
from firnlight.core.layers import flag_bit
from firnlight.core.tables import load_table

# (name, first bit, number of bits, ((value, class name), ...)); hashable, so equal codings share one table
Field = tuple[str, int, int, tuple[tuple[int, str], ...]]
_LARGEST_BITS = 16


def plain_word(name: str) -> str:
    """A class name without case and separators: "Cloud-Shadow " -> "cloud_shadow"."""
    return re.sub(r"[^a-z0-9]+", "_", name.lower()).strip("_")


@cache
def _words() -> dict[str, int]:
    words: dict[str, int] = {}
    for row in load_table("quality_words").rows.values():
        bits = sum(flag_bit(flag) for flag in row["flags"])
        for word in row["words"]:
            words[word] = bits
    return words


def word_flags(name: str, field: str = "") -> int:
    """Our quality bits of a class name; of a bitfield's class also with the field's name before it.

    Raises
    ------
    InputProblem : a name that tables/quality_words.toml does not hold; `where` is left to the caller.
    """
    words, word = _words(), plain_word(name)
    joined = plain_word(f"{field} {name}")
    for one in (joined, word) if field else (word,):
        if one in words:
            return words[one]
    # "not snow" names what a cell is not: no reason to drop it
    rest = word.removeprefix("not_").removeprefix("no_")
    if rest != word and (rest in words or rest == plain_word(field)):
        return 0
    raise InputProblem(
        "",
        f"quality class of {field}" if field else "quality class",
        repr(name),
        "a known class name: " + ", ".join(sorted(words)),
        "name the class in the item by one of these words, or take the asset out of the item",
    )


def _size(data_type: str, highest_bit: int) -> int:
    sizes = {"uint8": 256, "int8": 256, "uint16": 65536, "int16": 65536, "": 65536}
    if data_type not in sizes or highest_bit > _LARGEST_BITS:
        raise InputProblem(
            "",
            "quality data_type",
            data_type or f"{highest_bit} bits",
            "8 or 16 bits",
            "cut the raster down to the bits that tell cloud, shadow and fill",
        )
    return sizes[data_type]


@lru_cache(maxsize=256)
def flags_of_bitfields(fields: tuple[Field, ...], data_type: str) -> bytes:
    """Lookup table of a raster whose bits are read in fields; a value without a class says nothing."""
    size = _size(data_type, max(first + length for _, first, length, _ in fields))
    numbers = np.arange(size, dtype=np.uint32)
    flags = np.zeros(size, np.uint8)
    for name, first, length, classes in fields:
        part = (numbers >> np.uint32(first)) & np.uint32((1 << length) - 1)
        for value, word in classes:
            flags[part == value] |= np.uint8(word_flags(word, name))
    return flags.tobytes()


@lru_cache(maxsize=256)
def flags_of_classes(classes: tuple[tuple[int, str], ...], data_type: str) -> bytes:
    """Lookup table of a raster whose numbers are classes; a number without a class is missing."""
    size = _size(data_type, 0)
    flags = np.full(size, flag_bit("missing"), np.uint8)
    for value, word in classes:
        if not -size // 2 <= value < size:
            raise InputProblem(
                "",
                f"quality class {word}",
                value,
                f"a value of {data_type or 'uint16'}",
                "correct the value in the item",
            )
        flags[value % size] = word_flags(word)
    return flags.tobytes()


@lru_cache(maxsize=256)
def with_nodata(flags: bytes, nodata: float | None) -> bytes:
    """The same table, with one stored number that means missing.

    Raises
    ------
    InputProblem : no such number in the raster's type.
    """
    if nodata is None:
        return flags
    table = np.frombuffer(flags, np.uint8).copy()
    if not (-table.size // 2 <= nodata < table.size and float(nodata).is_integer()):
        wanted = f"a whole number of at most {table.size - 1}"
        raise InputProblem("", "nodata of quality", nodata, wanted, "correct nodata in the item")
    table[int(nodata) % table.size] |= np.uint8(flag_bit("missing"))
    return table.tobytes()


def marks_missing(flags: bytes) -> bool:
    """Whether the table tells empty cells."""
    return bool((np.frombuffer(flags, np.uint8) & flag_bit("missing")).any())

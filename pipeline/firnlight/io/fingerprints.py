"""What makes two files the same? Their bytes."""

from __future__ import annotations

import hashlib
from pathlib import Path

import xxhash

from firnlight.core.errors import InputProblem

_CHUNK = 1 << 20
# multihash prefixes of the STAC file extension: algorithm and digest length
_MULTIHASH = {"1220": "sha256", "1340": "sha512", "1114": "sha1", "d50110": "md5"}


def _digest(path: Path, hasher: hashlib._Hash | xxhash.xxh3_128) -> str:
    with path.open("rb", buffering=0) as stream:
        while chunk := stream.read(_CHUNK):
            hasher.update(chunk)
    return hasher.hexdigest()


def content_id(path: Path) -> str:
    """xxh3_128 of a file's bytes, as hex after "xxh3:"."""
    return "xxh3:" + _digest(path, xxhash.xxh3_128())


def checked_content_id(path: Path, checksum: str, where: str) -> str:
    """The stated checksum (multihash, hex), after it was found to hold for the file's bytes.

    Raises
    ------
    InputProblem : the algorithm is unknown, or the bytes are others than stated.
    """
    stated = checksum.lower()
    prefix = next((p for p in _MULTIHASH if stated.startswith(p)), None)
    if prefix is None:
        raise InputProblem(
            where, f"file:checksum of {path.name}", checksum[:16], "a multihash of sha2-256, sha2-512, sha1 or md5",
            "correct the checksum in the item, or leave it out",
        )  # fmt: skip
    found = prefix + _digest(path, hashlib.new(_MULTIHASH[prefix]))
    if found != stated:
        raise InputProblem(
            where, f"file:checksum of {path.name}", found[:20] + "...", stated[:20] + "... as the item states",
            "deliver the file again; if it was changed on purpose, write the item again",
        )  # fmt: skip
    return stated


def text_id(text: str) -> str:
    """xxh3_128 of a text."""
    return xxhash.xxh3_128_hexdigest(text.encode("utf-8"))

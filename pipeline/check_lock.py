"""Is every installed package the one that lock.txt names?"""

import sys
from importlib.metadata import distributions
from pathlib import Path


def plain(name: str) -> str:
    return name.lower().replace("_", "-").replace(".", "-")


def main(lock: Path) -> int:
    lines = (line.split("#")[0].strip() for line in lock.read_text(encoding="utf-8").splitlines())
    pinned = {plain(name): version for name, version in (line.split("==") for line in lines if line)}
    own = {"firnlight", "pip", "setuptools"}
    wrong = [
        f"{dist.name}=={dist.version}"
        for dist in distributions()
        if plain(dist.name) not in own and pinned.get(plain(dist.name)) != dist.version
    ]
    if wrong:
        sys.stderr.write("installed, but not so in pipeline/lock.txt: " + ", ".join(sorted(wrong)) + "\n")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main(Path(sys.argv[1])))

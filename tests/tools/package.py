"""Builds the zip that QGIS installs and that its plugin repository takes.

    python3 tests/tools/package.py FOLDER

The zip holds one folder, downwarp/, with nothing but what runs or is read: no tests, no build files, no caches.
Standard library only.
"""

from __future__ import annotations

import configparser
import sys
import zipfile
from collections.abc import Iterator
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
FILES = ("__init__.py", "metadata.txt", "LICENSE", "README.md", "CHANGELOG.md")
FOLDERS = ("plugin", "algorithms", "icons")
SUFFIXES = {".html", ".json", ".model3", ".png", ".py", ".qm", ".svg"}
SOURCES = {".ts"}
"""Suffixes of what is in the folders and does not ship: translations before they are compiled."""


def metadata(checkout: Path = CHECKOUT) -> configparser.SectionProxy:
    """The plugin's metadata, read with interpolation as the repository reads it: a bare % is an error."""
    parser = configparser.ConfigParser()
    parser.optionxform = str  # type: ignore[assignment,method-assign] # keys keep their case, as typeshed does not expect
    parser.read(checkout / "metadata.txt", encoding="utf-8")
    return parser["general"]


def members(checkout: Path = CHECKOUT) -> Iterator[Path]:
    """Files that ship, relative to the checkout, in a fixed order; raises ValueError at one of an unexpected kind."""
    for name in FILES:
        yield Path(name)
    for folder in FOLDERS:
        for path in sorted((checkout / folder).rglob("*")):
            inner = path.relative_to(checkout)
            if path.is_dir() or "__pycache__" in inner.parts or path.suffix in SOURCES:
                continue
            if path.suffix not in SUFFIXES or path.name.startswith("."):
                raise ValueError(f"{inner} is no file that Downwarp ships ({', '.join(sorted(SUFFIXES))})")
            yield inner


def build(folder: Path, checkout: Path = CHECKOUT) -> Path:
    """Write downwarp-<version>.zip into ``folder`` and return its path; equal sources give equal bytes."""
    folder.mkdir(parents=True, exist_ok=True)
    target = folder / f"downwarp-{metadata(checkout)['version']}.zip"
    with zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as archive:
        for member in members(checkout):
            entry = zipfile.ZipInfo(f"downwarp/{member.as_posix()}")
            entry.compress_type = zipfile.ZIP_DEFLATED
            entry.external_attr = 0o644 << 16
            archive.writestr(entry, (checkout / member).read_bytes())
    return target


if __name__ == "__main__":
    if len(sys.argv) != 2:
        sys.exit("usage: package.py FOLDER")
    try:
        print(build(Path(sys.argv[1])))
    except (OSError, ValueError) as error:
        sys.exit(str(error))

"""Static files under content-hashed addresses: they never change, so browsers keep them for good.

All files share one hash, of the whole tree, so that scripts may import each other by relative address.
"""

import functools
import gzip
import hashlib
import importlib.resources
from dataclasses import dataclass
from pathlib import Path

from app.errors import NotFoundError
from app.settings import static_dir

PLOTLY = "plotly.min.js"
SMALLEST_COMPRESSED = 1024

_TYPES = {
    ".css": "text/css; charset=utf-8",
    ".js": "text/javascript; charset=utf-8",
    ".svg": "image/svg+xml",
    ".png": "image/png",
    ".ico": "image/x-icon",
    ".json": "application/json",
    ".webmanifest": "application/manifest+json",
    ".txt": "text/plain; charset=utf-8",
}


@dataclass(frozen=True)
class Shelf:
    """All static files by name, and the hash that stands in their addresses."""

    digest: str
    files: dict[str, Path]


@functools.cache
def shelf() -> Shelf:
    """Return the static files of this installation, read once."""
    root = static_dir()
    files = {
        path.relative_to(root).as_posix(): path
        for path in sorted(root.rglob("*"))
        if path.is_file() and path.suffix in _TYPES
    }
    files[PLOTLY] = Path(str(importlib.resources.files("plotly") / "package_data" / PLOTLY))
    total = hashlib.sha256()
    for name, path in sorted(files.items()):
        total.update(f"{name}\0".encode())
        total.update(hashlib.sha256(path.read_bytes()).digest())
    return Shelf(total.hexdigest()[:16], files)


def asset_url(name: str) -> str:
    """Return the address of a static file, relative to the pages; raise NotFoundError."""
    known = shelf()
    if name not in known.files:
        raise NotFoundError("no-such-asset", f"there is no static file '{name}'", "name", name, None)
    return f"assets/{known.digest}/{name}"


@dataclass(frozen=True)
class Asset:
    """The bytes of a static file as they go out."""

    body: bytes
    media_type: str
    compressed: bool


def load(digest: str, name: str, *, compress: bool) -> Asset:
    """Return a static file by the two parts of its address; raise NotFoundError."""
    known = shelf()
    if digest != known.digest or name not in known.files:
        raise NotFoundError("no-such-asset", "there is no static file at this address", "name", name, None)
    return _load(name, compress)


@functools.lru_cache(maxsize=256)
def _load(name: str, compress: bool) -> Asset:  # noqa: FBT001 - positional for the cache
    path = shelf().files[name]
    body = path.read_bytes()
    media_type = _TYPES[path.suffix]
    worth = compress and len(body) >= SMALLEST_COMPRESSED and path.suffix not in {".png", ".ico"}
    return Asset(gzip.compress(body, 6, mtime=0) if worth else body, media_type, worth)

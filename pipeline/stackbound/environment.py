"""What this process may use: processors, memory; and sizes as people write them."""

from __future__ import annotations

import math
import os
import re
from pathlib import Path

import psutil

from .errors import UsageError

__all__ = ["cpus", "format_size", "memory", "parse_size"]

_CGROUP_ROOT = Path("/sys/fs/cgroup")
_POWERS = {"": 0, "k": 1, "m": 2, "g": 3, "t": 4}
_SIZE = re.compile(r"\s*(\d+(?:\.\d*)?|\.\d+)\s*([kmgt]?)(i?)(b?)\s*", re.IGNORECASE | re.ASCII)


def cpus() -> int:
    """Return the number of processors that this process may use: affinity and the quota of its control group."""
    affinity = getattr(os, "sched_getaffinity", None)
    count = len(affinity(0)) if affinity is not None else os.cpu_count() or 1
    quota = min((_cpu_quota(folder) for folder in _cgroups("cpu")), default=math.inf)
    return max(1, min(count, math.ceil(quota) if math.isfinite(quota) else count))


def memory() -> int:
    """Return the bytes of memory that this process may use: the machine's, or less by its control group or limits."""
    limits: list[int] = [psutil.virtual_memory().total]
    for folder in _cgroups("memory"):
        for name in ("memory.max", "memory.limit_in_bytes"):
            text = _read(folder / name)
            if text.isdigit():
                limits.append(int(text))
    try:
        import resource
    except ImportError:  # Windows has no such limits
        pass
    else:
        soft, _ = resource.getrlimit(resource.RLIMIT_AS)
        if soft != resource.RLIM_INFINITY:
            limits.append(soft)
    return min(limits)


def _cgroups(controller: str) -> list[Path]:
    """Return the folders of this process's control groups, from its own up to the root (Linux, version 1 and 2)."""
    folders: list[Path] = []
    for line in _read(Path("/proc/self/cgroup")).splitlines():
        _, controllers, path = line.split(":", 2)
        if controllers == "":
            top = _CGROUP_ROOT
        elif controller in controllers.split(","):
            top = _CGROUP_ROOT / controller
        else:
            continue
        own = top / path.lstrip("/")
        # Inside a container the path may name folders that only the host sees; the root then holds the limits.
        folders += [folder for folder in (own, *own.parents) if folder == top or top in folder.parents]
    return folders


def _cpu_quota(folder: Path) -> float:
    words = _read(folder / "cpu.max").split()
    if not words:
        words = [_read(folder / "cpu.cfs_quota_us"), _read(folder / "cpu.cfs_period_us")]
    if len(words) == 2 and all(word.isdigit() and int(word) > 0 for word in words):
        return int(words[0]) / int(words[1])
    return math.inf


def _read(path: Path) -> str:
    try:
        return path.read_text(encoding="ascii").strip()
    except (OSError, UnicodeDecodeError):
        return ""


def parse_size(size: int | str) -> int:
    """Return a number of bytes.

    Parameters
    ----------
    size : int or str
        Bytes, or text such as "600MiB" (powers of 1024) or "2GB" (powers of 1000); the letter B may be left out.

    Raises
    ------
    stackbound.errors.UsageError
        Not a size, or not above zero.
    """
    if isinstance(size, bool) or not isinstance(size, int | str):
        raise UsageError(f"{size!r} is not a size.", remedy='Give bytes, or text such as "600MiB" or "2GB".')
    if isinstance(size, int):
        value = size
    else:
        match = _SIZE.fullmatch(size)
        if match is None or (match[3] and not match[2]):
            raise UsageError(f"'{size}' is not a size.", remedy="Write for example 600MiB or 2GB.")
        value = int(float(match[1]) * (1024 if match[3] else 1000) ** _POWERS[match[2].lower()])
    if value <= 0:
        raise UsageError(f"A size of {size} is not above zero.", remedy="Write for example 600MiB or 2GB.")
    return value


def format_size(size: int) -> str:
    """Return a number of bytes as people read it, in powers of 1000: "96.4 MB"."""
    value, unit = float(size), "bytes"
    for larger in ("kB", "MB", "GB", "TB", "PB"):
        if value < 999.5:
            break
        value, unit = value / 1000, larger
    if unit == "bytes":
        return f"{size} bytes" if size != 1 else "1 byte"
    return f"{value:.3g} {unit}"

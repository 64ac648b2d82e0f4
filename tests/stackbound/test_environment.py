"""What the process may use, and sizes as people write them."""

from __future__ import annotations

import os
from pathlib import Path

import psutil
import pytest
from stackbound import environment
from stackbound.environment import cpus, format_size, memory, parse_size
from stackbound.errors import UsageError


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("600MiB", 600 * 2**20),
        ("2GB", 2 * 10**9),
        ("1.5 GiB", 3 * 2**29),
        ("500m", 500 * 10**6),
        ("64ki", 2**16),
        ("1000", 1000),
        ("10B", 10),
        (4096, 4096),
    ],
)
def test_sizes_are_read_as_they_are_meant(text, size):
    """MiB is a power of 1024, MB a power of 1000; the letter B and the case do not matter."""
    assert size == parse_size(text)


@pytest.mark.parametrize("text", ["", "MiB", "six MB", "-1GB", "0", 0, -5, "1e9", "5 XB", "3iB", True, 1.5])
def test_what_is_no_size_is_refused(text):
    """Anything else is a usage error with an example of what to write."""
    with pytest.raises(UsageError, match="600MiB"):
        parse_size(text)


@pytest.mark.parametrize(
    ("size", "text"),
    [(0, "0 bytes"), (1, "1 byte"), (999, "999 bytes"), (1000, "1 kB"), (96_400_000, "96.4 MB"), (999_900, "1 MB")],
)
def test_sizes_are_printed_with_three_digits(size, text):
    """Sizes are printed in powers of 1000 with three significant digits."""
    assert text == format_size(size)


def test_no_more_processors_than_this_process_may_use():
    """The number of processors is at least one and never beyond the machine's."""
    assert 1 <= cpus() <= (os.cpu_count() or 1)


@pytest.mark.skipif(not hasattr(os, "sched_setaffinity"), reason="this system has no processor affinity")
def test_affinity_limits_the_processors():
    """A process pinned to one processor counts one."""
    allowed = os.sched_getaffinity(0)
    try:
        os.sched_setaffinity(0, {min(allowed)})
        count = cpus()
    finally:
        os.sched_setaffinity(0, allowed)

    assert 1 == count


def fake_system(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, membership: str, files: dict[str, str]) -> None:
    """Let the module see control groups under `tmp_path`."""
    for name, text in files.items():
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text)
    read = environment._read
    monkeypatch.setattr(environment, "_CGROUP_ROOT", tmp_path)
    monkeypatch.setattr(environment, "_read", lambda path: membership if "proc" in path.parts else read(path))
    monkeypatch.setattr(os, "sched_getaffinity", lambda _: set(range(64)), raising=False)


@pytest.mark.parametrize(
    ("membership", "files", "count"),
    [
        ("0::/jobs/one", {"jobs/one/cpu.max": "max 100000", "jobs/cpu.max": "250000 100000"}, 3),
        ("0::/", {"cpu.max": "50000 100000"}, 1),
        ("0::/only/on/the/host", {"cpu.max": "400000 100000"}, 4),
        ("4:cpu,cpuacct:/a", {"cpu/a/cpu.cfs_quota_us": "200000", "cpu/a/cpu.cfs_period_us": "100000"}, 2),
        ("4:cpu,cpuacct:/a", {"cpu/a/cpu.cfs_quota_us": "-1", "cpu/a/cpu.cfs_period_us": "100000"}, 64),
        ("", {}, 64),
    ],
)
def test_the_quota_of_a_control_group_limits_the_processors(tmp_path, monkeypatch, membership, files, count):
    """The smallest quota from the own control group up to the root counts, rounded up, in both versions."""
    fake_system(tmp_path, monkeypatch, membership, files)

    assert count == cpus()


@pytest.mark.parametrize(
    ("membership", "files"),
    [
        ("0::/jobs/one", {"jobs/one/memory.max": "max", "jobs/memory.max": "1000000"}),
        ("9:memory:/a", {"memory/a/memory.limit_in_bytes": "1000000"}),
    ],
)
def test_the_limit_of_a_control_group_limits_the_memory(tmp_path, monkeypatch, membership, files):
    """The smallest memory limit from the own control group up to the root counts, in both versions."""
    fake_system(tmp_path, monkeypatch, membership, files)

    assert 1_000_000 == memory()


def test_no_more_memory_than_the_machine_has():
    """Without limits the machine's own memory counts."""
    assert 0 < memory() <= psutil.virtual_memory().total


def test_a_limit_on_the_address_space_limits_the_memory(monkeypatch):
    """`ulimit -v` counts too."""
    resource = pytest.importorskip("resource")
    monkeypatch.setattr(resource, "getrlimit", lambda _: (12345, resource.RLIM_INFINITY))

    assert 12345 == memory()

"""The log."""

import json

import pytest
from stackbound.errors import IntegrityError
from stackbound.log import canonical, end_line, read_log, root_of, write_log

HEADER = {"record": "header", "format": "x"}
REGIONS = [{"record": "region", "index": index, "sum": str(10**30 + index)} for index in range(3)]
TOTALS = {"record": "totals", "regions": 3}
LOG = write_log(HEADER, REGIONS, TOTALS)


def test_a_log_reads_back():
    """What was written is what is read, in the same order, with the root of its last line."""
    log = read_log(LOG)

    assert () == log.faults
    assert HEADER == log.header
    assert dict(enumerate(REGIONS)) == log.regions
    assert TOTALS == log.totals
    assert json.loads(LOG.splitlines()[-1])["sha256"] == log.root == root_of(LOG)


def test_floats_are_refused():
    """No floating-point number gets into a record, however deep."""
    with pytest.raises(TypeError):
        canonical({"a": [{"b": 1.0}]})


@pytest.mark.parametrize("bit", range(8))
def test_every_flipped_bit_is_found(bit):
    """No byte of the log can change unseen, the last line and all line feeds included."""
    for place in range(len(LOG)):
        changed = bytearray(LOG)
        changed[place] ^= 1 << bit

        assert read_log(bytes(changed)).root is None
        assert read_log(bytes(changed)).faults


def test_every_cut_is_found():
    """A log that was cut anywhere is not intact."""
    for length in range(len(LOG)):
        assert read_log(LOG[:length]).faults
        with pytest.raises(IntegrityError):
            root_of(LOG[:length])


def test_changes_that_leave_the_meaning_are_found():
    """A log that says the same in other bytes is not intact."""
    spaced = LOG.replace(b'"format":"x"', b'"format": "x"')

    assert read_log(spaced).root is None


def test_a_cut_between_lines_names_what_is_missing():
    """A log without its last lines says so, and its records are still read."""
    log = read_log(b"".join(LOG.splitlines(keepends=True)[:3]))

    assert "cut" in log.faults[0]
    assert HEADER == log.header
    assert log.totals is None


def test_a_repeated_record_is_found():
    """A region that is recorded twice is a fault even where the last line fits."""
    body = b"".join(canonical(record) + b"\n" for record in (HEADER, REGIONS[0], REGIONS[0], TOTALS))

    assert ("line 3 repeats the record of region 0",) == read_log(body + end_line(body)).faults

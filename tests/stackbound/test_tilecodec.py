"""The guarantee, the checks and the manners of the tile codec."""

from __future__ import annotations

import pickle
from typing import Any

import numpy as np
import pytest
from codec_strategies import coders, integer_pixels, largest_error, neighbour_coder, plain_coder, tolerances
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from stackbound import decode as alone
from stackbound.checksum import crc32c
from stackbound.errors import PluginError, TileError, UsageError
from stackbound.stages import Quantize, Transform
from stackbound.tilecodec import TileCoder, decode, describe
from stackbound_stages.none import PredictNone
from stackbound_stages.rans import Rans
from stackbound_stages.uniform import Uniform

RNG = np.random.default_rng(5)
FIELD = np.clip(np.rint(RNG.normal(1000, 6, (6, 70, 90)) + 300 * np.sin(np.arange(90) / 9)), 0, 65535).astype(np.uint16)


@settings(max_examples=250, deadline=None)
@given(integer_pixels(), tolerances(), coders())
def test_bound_holds(pixels: NDArray[Any], tolerance: float, coder: TileCoder) -> None:
    """No pixel moves by more than the tolerance, whatever the type, the shape, the values and the prediction are."""
    decoded = decode(coder.encode(pixels, tolerance), pixels.shape, pixels.dtype)

    assert decoded.dtype == pixels.dtype
    assert decoded.shape == pixels.shape
    assert decoded.flags.c_contiguous
    assert largest_error(pixels, decoded) <= tolerance


@settings(max_examples=60, deadline=None)
@given(integer_pixels(), tolerances(), coders())
def test_decoder_of_numpy_alone_agrees(pixels: NDArray[Any], tolerance: float, coder: TileCoder) -> None:
    """The plain decoder gives the pixels that the kernels give."""
    payload = coder.encode(pixels, tolerance)

    assert np.array_equal(
        decode(payload, pixels.shape, pixels.dtype), alone.decode(payload, pixels.shape, pixels.dtype)
    )


def test_bound_is_reached() -> None:
    """A tolerance is used up: the largest error equals it."""
    for tolerance in (1, 5, 12):
        decoded = decode(plain_coder().encode(FIELD, tolerance), FIELD.shape, FIELD.dtype)

        assert largest_error(FIELD, decoded) == tolerance


def test_fraction_of_a_step_is_no_allowance() -> None:
    """For integers a tolerance of 4.99 is 4."""
    decoded = decode(plain_coder().encode(FIELD, 4.99), FIELD.shape, FIELD.dtype)

    assert largest_error(FIELD, decoded) == 4


def test_same_bytes_again() -> None:
    """The same tile gives the same bytes, also from a pickled coder and from memory in another order."""
    coder = plain_coder().planned([FIELD], [3])
    payload = coder.encode(FIELD, 3)

    assert coder.encode(np.asfortranarray(FIELD), 3) == payload
    assert pickle.loads(pickle.dumps(coder)).encode(FIELD.copy(), 3) == payload
    assert TileCoder(coder.predict, coder.stage, coder.plan).encode(FIELD, 3) == payload


def test_constant_and_nearly_constant_tiles_are_tiny() -> None:
    """A tile that one value can stand for takes a few bytes."""
    assert len(plain_coder().encode(np.full((64, 64), 9, np.uint16), 0)) < 24
    assert len(plain_coder().encode(FIELD // 100, 20)) < 24


def test_padding_costs_nothing() -> None:
    """Trailing constant planes, rows and columns add a few bytes at most."""
    padded = np.zeros((8, 128, 128), np.uint16)
    padded[:6, :70, :90] = FIELD
    payload = plain_coder(block=[1, 16, 16], step=6).encode(padded, 3)

    assert len(payload) <= len(plain_coder(block=[1, 16, 16], step=6).encode(FIELD, 3)) + 12
    assert largest_error(padded[:6, :70, :90], decode(payload, padded.shape, padded.dtype)[:6, :70, :90]) <= 3
    assert not decode(payload, padded.shape, padded.dtype)[6:].any()


def test_narrow_wide_types_cost_no_more() -> None:
    """Data of 16 bits in a type of 32 bits, far from zero, takes the same bytes but for its offset."""
    far = FIELD.astype(np.int32) - 2_000_000_000

    assert len(plain_coder().encode(far, 2)) <= len(plain_coder().encode(FIELD, 2)) + 8


def test_tiles_say_what_they_are() -> None:
    """A payload names its version, its tolerance, its range and how it is predicted."""
    told = describe(plain_coder(block=[1, 8, 8], step=4).encode(FIELD, 3), FIELD.shape, FIELD.dtype)

    assert told["version"] == 1
    assert told["tolerance"] == 3
    assert told["mode"] == "transform"
    assert told["block"] == [1, 8, 8]
    assert (told["minimum"], told["maximum"]) == (FIELD.min(), FIELD.max())
    assert describe(TileCoder(PredictNone(), Rans()).encode(FIELD, 3), FIELD.shape, FIELD.dtype)["mode"] == "none"


@pytest.mark.parametrize("tolerance", [-1, float("nan"), -0.001])
def test_senseless_tolerances_are_refused(tolerance: float) -> None:
    """A tolerance below zero or not a number is a user's mistake."""
    with pytest.raises(UsageError):
        plain_coder().encode(FIELD, tolerance)


@pytest.mark.parametrize("dtype", ["bool", "complex64", ">u2"])
def test_other_types_are_refused(dtype: str) -> None:
    """Pixels that are no numbers of this machine are a user's mistake."""
    with pytest.raises(UsageError):
        plain_coder().encode(np.ones((4, 4), dtype), 0)


# ------------------------------------------------------------------------------------------------------ damaged bytes


def _sealed(payload: bytes) -> bytes:
    """Give changed bytes a checksum that matches, as an attacker would."""
    return payload[:1] + crc32c(payload[5:]).to_bytes(4, "little") + payload[5:]


PAYLOADS = [
    (coder.encode(pixels, tolerance), pixels)
    for pixels in (
        FIELD[:2, :20, :33],
        FIELD[0, :9, :9].astype(np.int64) << 40,
        RNG.integers(0, 2**32, (40, 3), np.uint32),
    )
    for coder in (
        plain_coder(block=[1, 8, 8], step=4),
        TileCoder(PredictNone(), Rans()),
        neighbour_coder(),
        neighbour_coder(base=True),
    )
    for tolerance in (0, 4)
]


def test_every_flipped_bit_is_found() -> None:
    """One flipped bit anywhere is an error, not other pixels."""
    payload, pixels = PAYLOADS[0]
    for bit in range(8 * len(payload)):
        changed = bytearray(payload)
        changed[bit // 8] ^= 1 << bit % 8
        with pytest.raises(TileError):
            decode(bytes(changed), pixels.shape, pixels.dtype)


@settings(max_examples=400, deadline=None)
@given(st.integers(0, len(PAYLOADS) - 1), st.data())
def test_hostile_bytes_are_refused(case: int, data: st.DataObject) -> None:
    """Changed bytes under a matching checksum raise the same error in both decoders, or change nothing."""
    payload, pixels = PAYLOADS[case]
    changed = bytearray(payload)
    for _ in range(data.draw(st.integers(1, 3))):
        at = data.draw(st.integers(9, max(9, len(changed) - 1)))
        how = data.draw(st.sampled_from(["set", "cut", "put"]))
        if how == "set" and at < len(changed):
            changed[at] = data.draw(st.integers(0, 255))
        elif how == "cut":
            del changed[at : at + data.draw(st.integers(1, 4))]
        else:
            changed[at:at] = data.draw(st.binary(min_size=1, max_size=4))
    hostile = _sealed(bytes(changed))
    try:
        decoded = decode(hostile, pixels.shape, pixels.dtype)
    except TileError:
        with pytest.raises(alone.DamagedError):
            alone.decode(hostile, pixels.shape, pixels.dtype)
    else:
        assert np.array_equal(decoded, decode(payload, pixels.shape, pixels.dtype))


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=200))
def test_arbitrary_bytes_are_refused(noise: bytes) -> None:
    """Bytes that no encoder wrote raise an error."""
    for payload in (noise, _sealed(b"\x01" + bytes(4) + noise)):
        with pytest.raises(TileError):
            decode(payload, (5, 6), np.dtype(np.uint16))
        with pytest.raises(TileError):
            describe(payload[:8], (5, 6), np.dtype(np.uint16))


def test_tile_of_another_place_is_refused() -> None:
    """A payload does not decode as a tile of another shape or type."""
    payload = plain_coder().encode(FIELD, 3)
    for shape, dtype in (
        ((6, 90, 70), "uint16"),
        ((6, 70, 90), "int16"),
        ((3, 70, 90), "uint16"),
        ((6, 70, 91), "uint16"),
    ):
        with pytest.raises(TileError):
            decode(payload, shape, np.dtype(dtype))


# ------------------------------------------------------------------------------------------- stages that misbehave


class Broken(Transform):
    """Returns what no transform may return."""

    name = "broken"

    def __init__(self, how: str) -> None:
        super().__init__()
        self.how = how

    def basis(self, axis: int, length: int, fitted: Any) -> Any:
        """Return a basis of the chosen fault."""
        faults: dict[str, Any] = {
            "name": "sine",
            "large": np.full((length, length), 2**20),
            "shape": np.ones((1, 1), np.int64),
            "type": np.ones((length, length)),
        }
        return faults.get(self.how, "dct")

    def forward(self, blocks: NDArray[np.float32], fitted: Any) -> Any:
        """Return coefficients of the chosen fault."""
        faults: dict[str, Any] = {
            "nan": np.full_like(blocks, np.nan),
            "double": blocks.astype(np.float64),
            "flat": blocks.ravel(),
            "nothing": None,
        }
        return faults.get(self.how, blocks)


@pytest.mark.parametrize("how", ["nan", "double", "flat", "nothing", "name", "large", "shape", "type"])
def test_broken_transforms_are_named(how: str) -> None:
    """A transform that returns the wrong shape, type, numbers or basis is an error that names it."""
    with pytest.raises(PluginError, match="transform"):
        plain_coder(transform=Broken(how), block=[1, 8, 8], step=4).encode(FIELD, 3)


class Crooked(Quantize):
    """Returns what no quantizer may return."""

    name = "crooked"

    def __init__(self, how: str) -> None:
        super().__init__()
        self.how = how

    def weights(self, block: tuple[int, ...]) -> Any:
        """Return weights of the chosen fault."""
        return {"zero": np.zeros(block), "nan": np.full(block, np.nan), "flat": np.ones(3)}.get(
            self.how, np.ones(block)
        )

    def indices(self, coefficients: Any, steps: Any, tolerance: int) -> Any:
        """Return indices of the chosen fault."""
        good = Uniform().indices(coefficients, steps, tolerance)
        return {"float": good.astype(np.float32), "few": good[:1], "list": [1]}.get(self.how, good)


@pytest.mark.parametrize("how", ["zero", "nan", "flat", "float", "few", "list"])
def test_crooked_quantizers_are_named(how: str) -> None:
    """A quantizer that returns the wrong shape, type or weights is an error that names it."""
    with pytest.raises(PluginError, match="quantize"):
        plain_coder(quantize=Crooked(how), block=[1, 8, 8], step=4).encode(FIELD, 3)


class Haar(Transform):
    """A transform with a basis of its own: sums and differences of pairs."""

    name = "haar"

    def basis(self, axis: int, length: int, fitted: Any) -> Any:
        """Return the basis in units of 2**-14 (of sqrt(2/N) times an orthonormal one)."""
        if length == 1:
            return "dct"
        return np.rint(_haar(length) * 2**14 * np.sqrt(length / 2)).astype(np.int64)

    def forward(self, blocks: NDArray[np.float32], fitted: Any) -> NDArray[np.float32]:
        """Apply it along y and x."""
        matrix = _haar(blocks.shape[2]).astype(np.float32)
        return np.einsum("vy,nzyx,ux->nzvu", matrix, blocks, matrix).astype(np.float32)


def _haar(length: int) -> NDArray[np.float64]:
    rows = [np.ones(length)]
    width = length
    while width > 1:
        for start in range(0, length, width):
            row = np.zeros(length)
            row[start : start + width // 2], row[start + width // 2 : start + width] = 1, -1
            rows.append(row)
        width //= 2
    return np.array([row / np.linalg.norm(row) for row in rows])


def test_third_party_basis_is_carried_in_the_tile() -> None:
    """A transform with a basis of its own predicts well, and both decoders read its tiles without it."""
    coder = plain_coder(transform=Haar(), block=[1, 8, 8], step=4)
    payload = coder.encode(FIELD, 3)
    decoded = decode(payload, FIELD.shape, FIELD.dtype)

    assert largest_error(FIELD, decoded) <= 3
    assert np.array_equal(decoded, alone.decode(payload, FIELD.shape, FIELD.dtype))
    assert len(payload) < 0.75 * len(TileCoder(PredictNone(), Rans()).encode(FIELD, 3))

"""The tile codec as a Zarr v3 codec, ``stackbound.tile``; the only module that touches ``zarr.core``.

Installed next to zarr it lets every program that reads Zarr v3 read a store. Decoding needs nothing but the bytes of a
tile. Encoding through zarr is done under the promise and the stages that the codec's configuration names, and only
where that promise is one number for the whole array: a codec sees a chunk and no position.
"""

from __future__ import annotations

import asyncio
import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, Self

import numpy as np
from zarr.abc.codec import ArrayBytesCodec
from zarr.core.common import parse_named_configuration

from stackbound.errors import PromiseError, StackboundError, TileError, UsageError
from stackbound.promise import stored_number

if TYPE_CHECKING:
    from zarr.core.array_spec import ArraySpec
    from zarr.core.buffer import Buffer, NDBuffer

    from stackbound.tilecodec import TileCoder

NAME = "stackbound.tile"
FORMAT = 1


def codec_configuration(
    tolerances: tuple[str, ...], stages: Mapping[str, Any], plan: Mapping[str, Any]
) -> dict[str, Any]:
    """Return the configuration of the codec as a store's ``zarr.json`` carries it.

    Parameters
    ----------
    tolerances : tuple of str
        In stored pixel values: one for the whole array, or one per channel.
    stages : mapping
        The records of the configuration's predict, transform, quantize and encode stages.
    plan : mapping
        What was chosen for the stack as a whole (`TileCoder.plan`).
    """
    return {"format": FORMAT, "tolerance": list(tolerances), "stages": dict(stages), "plan": dict(plan)}


@dataclass(frozen=True)
class TileCodec(ArrayBytesCodec):
    """Array to bytes and back, one tile at a time.

    Parameters
    ----------
    configuration : str
        The JSON text of the codec's configuration (text, so that equal codecs are equal and can be hashed).
    """

    is_fixed_size = False

    configuration: str = "{}"

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Self:
        """Return the codec that ``zarr.json`` describes."""
        _, configuration = parse_named_configuration(data, NAME)
        version = configuration.get("format")
        if version != FORMAT:
            raise UsageError(
                f"This array was written in format {version} of the codec {NAME}; this version of stackbound reads "
                f"format {FORMAT}.",
                remedy="Install a newer stackbound.",
            )
        return cls(json.dumps(configuration, sort_keys=True))

    def to_dict(self) -> dict[str, Any]:
        """Return name and configuration as they stand in ``zarr.json``."""
        return {"name": NAME, "configuration": json.loads(self.configuration)}

    def evolve_from_array_spec(self, array_spec: ArraySpec) -> Self:
        """Return this codec: nothing in it depends on the array."""
        return self

    def validate(self, *, shape: tuple[int, ...], dtype: Any, chunk_grid: Any) -> None:
        """Refuse pixel types that the codec does not hold."""
        _check_dtype(dtype.to_native_dtype())

    def compute_encoded_size(self, input_byte_length: int, chunk_spec: ArraySpec) -> int:
        """Refuse: the size depends on the pixels."""
        raise NotImplementedError

    async def _decode_single(self, chunk_data: Buffer, chunk_spec: ArraySpec) -> NDBuffer:
        return await asyncio.to_thread(self._decode, chunk_data, chunk_spec)

    async def _encode_single(self, chunk_data: NDBuffer, chunk_spec: ArraySpec) -> Buffer | None:
        return await asyncio.to_thread(self._encode, chunk_data, chunk_spec)

    def _decode(self, chunk: Buffer, spec: ArraySpec) -> NDBuffer:
        from stackbound.tilecodec import decode

        dtype = spec.dtype.to_native_dtype()
        payload = chunk.as_numpy_array().view(np.uint8)
        try:
            pixels = decode(payload, spec.shape, dtype)
        except StackboundError:
            raise
        except Exception as error:  # whatever goes wrong while decoding is damage of the tile, never silent
            raise TileError(f"A tile of {len(payload)} bytes cannot be decoded ({error}).") from error
        return spec.prototype.nd_buffer.from_numpy_array(pixels)

    def _encode(self, chunk: NDBuffer, spec: ArraySpec) -> Buffer:
        # zarr 3.1 does not call `validate` for a codec inside shards.
        pixels = np.ascontiguousarray(chunk.as_numpy_array())
        _check_dtype(pixels.dtype)
        if pixels.shape != spec.shape or pixels.dtype != spec.dtype.to_native_dtype():
            raise UsageError(
                f"A chunk of shape {pixels.shape} and type {pixels.dtype} was handed to an array with chunks of "
                f"{spec.shape} and {spec.dtype.to_native_dtype()}."
            )
        pixels = pixels.astype(pixels.dtype.newbyteorder("="), copy=False)
        payload = self._coder.encode(pixels, self._tolerance(pixels.dtype))
        return spec.prototype.buffer.from_bytes(payload)

    def _tolerance(self, dtype: np.dtype[Any]) -> int | float:
        tolerances = json.loads(self.configuration).get("tolerance")
        if not isinstance(tolerances, list) or len(tolerances) != 1:
            raise PromiseError(
                "The promise of this array is not one number for the whole array, and zarr does not tell a codec which "
                "part of the array it writes.",
                remedy="Write such arrays with stackbound.compress.",
            )
        return stored_number(str(tolerances[0]), dtype.kind == "f")

    @cached_property
    def _coder(self) -> TileCoder:
        from stackbound.config import PipelineConfig, build
        from stackbound.tilecodec import TileCoder

        configuration = json.loads(self.configuration)
        # The tolerance is handed over tile by tile; a configuration is not complete without one.
        record = {**configuration.get("stages", {}), "tolerance": {"value": "0", "unit": "stored"}}
        pipeline = build(PipelineConfig.from_record(record))
        return TileCoder(pipeline.predict, pipeline.encode, configuration.get("plan", {}))


def _check_dtype(dtype: np.dtype[Any]) -> None:
    if dtype.kind not in "iuf" or dtype.itemsize > 8:
        raise UsageError(
            f"The codec {NAME} holds integers and floats of at most 64 bits, not {dtype}.",
            remedy="Convert the array first.",
        )

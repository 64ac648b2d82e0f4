"""The contract of each stage: abstract classes without behaviour, in the order the data flows.

A stage is a class with a `kind`, a `name` (the name of its file and of its entry in a configuration), a frozen pydantic
model `Options`, and the methods of its kind. Objects are made once per run and used from several threads at once: a
stage keeps no state that its methods change.

Axes are named as in OME: t, c, z, y, x, always in this order; colour samples are c.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar

from pydantic import BaseModel, ConfigDict

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from stackbound.lattice import LatticeTile
    from stackbound.prediction import Prediction

Index = tuple[int, ...]
Plan = Mapping[str, Any]
"""What is chosen once for a whole stack and kept in the store: whole numbers, strings, lists and mappings of these."""


class Options(BaseModel):
    """Base of every stage's options: frozen, unknown keys refused, strict types, no infinities."""

    model_config = ConfigDict(
        frozen=True, extra="forbid", strict=True, allow_inf_nan=False, use_attribute_docstrings=True
    )


AnyOptions = Options
"""The same under a name that a stage's own `Options` does not hide."""


class Stage(ABC):
    """One exchangeable part of the pipeline.

    Parameters
    ----------
    options : Options, optional
        An instance of the class's own `Options`; its defaults when not given.
    """

    kind: ClassVar[str]
    name: ClassVar[str]
    Options: ClassVar[type[Options]] = Options

    def __init__(self, options: AnyOptions | None = None) -> None:
        self.options = self.Options() if options is None else options

    @property
    def title(self) -> str:
        """What messages call this stage."""
        return f"{self.kind} stage '{self.name}'"


# ------------------------------------------------------------------------------------------------------------ load


@dataclass(frozen=True)
class SourceFile:
    """One file of a source as it was when it was opened (it is looked at again at the end of a run)."""

    path: Path
    size: int
    mtime_ns: int


@dataclass(frozen=True)
class StackInfo:
    """What a loader tells of a stack without reading its pixels.

    Attributes
    ----------
    kind : str
        What the source is, in words ("OME-TIFF", "ImageJ hyperstack", "NPY", ...); goes into the log, so no names.
    axes : str
        Two to five of "tczyx", in this order.
    shape : tuple of int
        One length per axis.
    dtype : numpy.dtype
        Pixel type in the byte order of this machine.
    scale : tuple of float or None
        Distance between pixels per axis, where known.
    units : tuple of str or None
        Unit of `scale` per axis by its UDUNITS name ("micrometer", "second"), where known.
    channel_names : tuple of str
        One name per channel, or empty.
    ome_xml : bytes or None
        The original OME-XML, verbatim.
    headers : mapping of str to bytes
        Original headers, verbatim, by file name; kept in the store under ``stackbound/source/``.
    attributes : mapping
        What the matching `save` stage needs to write the same kind of file again (JSON values without floats).
    notes : tuple of str
        What the user should be told ("the first axis has no name: taken as z").
    read_overhead : int or None
        Bytes that `OpenSource.read` may hold beyond its result; None where the loader does not know (a few planes are
        reckoned then).
    """

    kind: str
    axes: str
    shape: Index
    dtype: np.dtype[Any]
    scale: tuple[float | None, ...] = ()
    units: tuple[str | None, ...] = ()
    channel_names: tuple[str, ...] = ()
    ome_xml: bytes | None = None
    headers: Mapping[str, bytes] = field(default_factory=dict)
    attributes: Mapping[str, Any] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    read_overhead: int | None = None


class OpenSource(ABC):
    """A source that was recognised and opened; closed by its context manager."""

    info: StackInfo
    files: tuple[SourceFile, ...] = ()

    @abstractmethod
    def read(self, start: Index, stop: Index) -> NDArray[Any]:
        """Return the pixels of one box.

        Parameters
        ----------
        start, stop : tuple of int
            Half-open bounds per axis of `info.axes`, inside the stack.

        Returns
        -------
        ndarray
            Shape ``stop - start``, C order, dtype `info.dtype`. The caller owns it. Memory beyond the result stays
            within a few planes.

        Raises
        ------
        stackbound.errors.SourceError
            The bytes cannot be read or decoded; names file and plane.

        Notes
        -----
        The machine calls this from one thread at a time.
        """

    def close(self) -> None:  # noqa: B027  # a source without open files has nothing to do
        """Release files."""

    def __enter__(self) -> OpenSource:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()


class Load(Stage):
    """Recognise a source; give its axes, shape, dtype, metadata; read any region."""

    kind = "load"

    @abstractmethod
    def recognises(self, source: object) -> bool:
        """Return whether this loader is the one for `source` (a path, a list of paths, an array), by a cheap look."""

    @abstractmethod
    def open(self, source: object, *, axes: str | None = None) -> OpenSource:
        """Open `source`.

        Parameters
        ----------
        source : object
            What `recognises` accepted.
        axes : str, optional
            The user's own word on the axes, in the stored order ("ctzyx"), where the source does not say or says wrong.

        Raises
        ------
        stackbound.errors.SourceError
            Empty, damaged, truncated or unsupported sources; found here where it can be found without decoding pixels.
        """


# ------------------------------------------------------------------------------------------------------------ tile


@dataclass(frozen=True)
class Grid:
    """Tile and region shapes, one length per axis of the stack.

    Every length of `region` is a whole multiple of that of `tile`. At most three axes of `tile` are longer than 1.
    """

    tile: Index
    region: Index


class Tile(Stage):
    """Choose tile and region shapes for a stack."""

    kind = "tile"

    @abstractmethod
    def grid(self, info: StackInfo, source: OpenSource | None = None) -> Grid:
        """Return the shapes for a stack; they depend on the stack and the options alone, never on memory or workers."""


# -------------------------------------------------------------------------------------------- transform and quantize


class Transform(Stage):
    """Blocks of pixels to coefficients; the way back is an integer matrix per axis that every decoder applies."""

    kind = "transform"

    def fit(self, sample: NDArray[np.float32], block: Index) -> Plan:
        """Return what the basis needs to know of a stack, learned from a sample; kept in the store.

        Parameters
        ----------
        sample : ndarray of float32, shape (n, bz, by, bx)
            Blocks of pixels in lattice steps.
        block : tuple of int
            The block's shape (bz, by, bx).
        """
        return {}

    @abstractmethod
    def basis(self, axis: int, length: int, fitted: Plan) -> str | NDArray[np.int64]:
        """Return the basis that the decoder applies along one axis of a block.

        Parameters
        ----------
        axis : int
            0, 1, 2 for z, y, x.
        length : int
            The block's length along it: 1, 2, 4, 8, 16 or 32.
        fitted : mapping
            What `fit` returned for this stack.

        Returns
        -------
        str or ndarray of int64, shape (length, length)
            "dct" for the cosine basis of type II; or whole numbers, row u being the basis function of index u times
            2**14, each at most 2**15 in magnitude.
        """

    @abstractmethod
    def forward(self, blocks: NDArray[np.float32], fitted: Plan) -> NDArray[np.float32]:
        """Return the coefficients of all blocks of a tile.

        Parameters
        ----------
        blocks : ndarray of float32, shape (n, bz, by, bx)
            Pixels in lattice steps. The first axis is the one that runs fastest in memory.
        fitted : mapping
            What `fit` returned for this stack.

        Returns
        -------
        ndarray of float32, shape (n, bz, by, bx)
            Finite; in units in which an orthonormal basis keeps the sum of squares. They need not be exact: what they
            are changes the size of the result, never its error.
        """


class Quantize(Stage):
    """Coefficients to whole-number indices under a step per frequency."""

    kind = "quantize"

    def weights(self, block: Index) -> NDArray[np.float64]:
        """Return how much coarser than the tile's step each frequency is quantized.

        Parameters
        ----------
        block : tuple of int
            The block's shape (bz, by, bx).

        Returns
        -------
        ndarray of float64, shape (bz, by, bx)
            Positive, finite.
        """
        import numpy as np

        return np.ones(block)

    @abstractmethod
    def indices(
        self, coefficients: NDArray[np.float32], steps: NDArray[np.float64], tolerance: int
    ) -> NDArray[np.int32]:
        """Return the index of every coefficient; the decoder forms ``index * step``.

        Parameters
        ----------
        coefficients : ndarray of float32, shape (n, bz, by, bx)
            What the transform returned. The first axis is the one that runs fastest in memory.
        steps : ndarray of float64, shape (bz, by, bx)
            The step per frequency that the decoder will use, in the unit of the coefficients.
        tolerance : int
            The tile's tolerance in lattice steps.

        Returns
        -------
        ndarray of int32, shape (n, bz, by, bx)
            Any whole numbers; the machine clips them.
        """


# --------------------------------------------------------------------------------------------------------- predict


class Predict(Stage):
    """Foresee a tile: choose, in the vocabulary of `stackbound.prediction`, what the decoder will predict.

    Parameters
    ----------
    options : Options, optional
        As for every stage.
    transform, quantize : stages, optional
        The stages that the configuration names beside this one, for predictors that use them.
    """

    kind = "predict"

    def __init__(
        self,
        options: Options | None = None,
        *,
        transform: Transform | None = None,
        quantize: Quantize | None = None,
    ) -> None:
        super().__init__(options)
        self.transform = transform
        self.quantize = quantize

    @property
    def others(self) -> tuple[tuple[str, str], ...]:
        """Kind and name of every stage that this one uses besides those that it was given; kept in the store."""
        return ()

    def plan(self, samples: Sequence[LatticeTile], size: Callable[[LatticeTile, Prediction], int]) -> Plan:
        """Return what is chosen once for a stack, from some of its tiles.

        Parameters
        ----------
        samples : sequence of LatticeTile
            Whole tiles, or pieces of them.
        size : callable
            ``size(tile, prediction)`` is the number of bytes that the tile takes under a prediction (measured, so
            as slow as coding it).
        """
        return {}

    @abstractmethod
    def predict(self, tile: LatticeTile, plan: Plan, size: Callable[[LatticeTile, Prediction], int]) -> Prediction:
        """Return the prediction for one tile: the numbers from which the decoder forms it.

        Parameters
        ----------
        tile : LatticeTile
            Lattice values and tolerance.
        plan : mapping
            What `plan` returned for this stack, or an empty mapping where nothing was planned.
        size : callable
            As for `plan`.
        """


# ---------------------------------------------------------------------------------------------------------- encode


class Encode(Stage):
    """Choose how indices, residuals and side numbers become bytes; every coder named here is known to every decoder."""

    kind = "encode"

    @property
    @abstractmethod
    def coder(self) -> str:
        """Name of the lossless coder: "rans" (interleaved range coding in spread classes) or "zstd"."""

    @property
    def effort(self) -> int:
        """How hard the coder tries, where it has levels."""
        return 0


# ---------------------------------------------------------------------------------------------------------- verify


class Verify(Stage):
    """A figure about original and decoded pixels, gathered region by region.

    `measure` returns what one region adds, `combine` makes the figure of the whole stack from those in region order,
    so the result does not depend on the number of workers.
    """

    kind = "verify"

    @abstractmethod
    def measure(self, original: NDArray[Any], decoded: NDArray[Any], info: StackInfo) -> Any:
        """Return a small picklable part of the figure for one region (arrays of the same shape and dtype)."""

    @abstractmethod
    def combine(self, parts: list[Any], info: StackInfo) -> str:
        """Return the figure as a decimal string that reads back to the same number ("inf" and "nan" allowed)."""


# ------------------------------------------------------------------------------------------------------------ save


class Save(Stage):
    """Write a decoded stack as a file of one format, with its metadata."""

    kind = "save"
    suffixes: ClassVar[tuple[str, ...]]
    """Lower-case file name endings that this format owns, longest first (".ome.tiff", ".ome.tif")."""

    @abstractmethod
    def check(self, info: StackInfo) -> None:
        """Raise `stackbound.errors.UsageError` where the format cannot hold this stack unchanged."""

    @abstractmethod
    def write(self, target: Path, source: OpenSource) -> None:
        """Write all pixels and the metadata of `source.info` to `target`, plane by plane.

        Parameters
        ----------
        target : Path
            A new name chosen by the machine, which renames it when this returns.
        source : OpenSource
            The decoded stack; `read` decodes the tiles it needs.
        """

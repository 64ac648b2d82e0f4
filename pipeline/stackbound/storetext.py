"""The README.txt that every store carries: what it promises, what it does not, and how to use it."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from stackbound.store import Description

CAUTIONS = (
    "Research use. This program does not decide whether an image is fit for diagnosis, treatment or any regulated "
    "purpose.",
    "The bound limits the change of each stored pixel value. It does not promise that a given measurement, reading or "
    "model result is unchanged. Test yours.",
    "Medical images: follow local law, retention rules, your institution's policy and qualified clinical review before "
    "using or deleting anything. Some uses do not allow lossy copies.",
    "Never make this the only copy until an independent person has checked the log and your retention period allows "
    "it.",
    "Labels, masks, segmentations, calibration frames and data with few counts per pixel should be stored without loss "
    "(tolerance 0).",
    "If the source was compressed with loss or processed before, errors add up.",
    "Where the tolerance exceeds the noise, averages may be biased and the noise looks smaller than it was. Noise "
    "estimates from the decoded pixels are not valid.",
    "Headers of the source are kept as they were. Remove personal data before sharing.",
)
"""What a user should know before relying on a store; also printed by `restore`."""


def readme(store: Description) -> str:
    """Return the text of README.txt."""
    sections = {
        "A stored image stack": _what(store),
        "The promise": f"{store.promise.words}\n{_CHECKED}",
        "What it does not promise": "\n".join(f"- {caution}" for caution in CAUTIONS),
        "To open": _opening(store),
        "To verify": _VERIFYING,
        "To cite": _citing(store),
    }
    return "\n".join(f"{title}\n{'-' * len(title)}\n{text}\n" for title, text in sections.items())


_CHECKED = """\
Every region was decoded again from disk and compared with the source, pixel by pixel, before this store got its name.
stackbound/verification.jsonl holds the outcome for each region."""

_VERIFYING = """\
stackbound verify PATH_OF_THIS_STORE
stackbound verify PATH_OF_THIS_STORE --against THE_SOURCE
stackbound verify PATH_OF_THIS_STORE --root ROOT_KEPT_ELSEWHERE
The root is the hash in the last line of verification.jsonl. A store that was rewritten whole together with its log is
recognised only by a root that was kept elsewhere."""


def _what(store: Description) -> str:
    axes = ", ".join(f"{axis} {length}" for axis, length in zip(store.info.axes, store.info.shape, strict=True))
    return f"Written by stackbound {store.version}.\nAxes: {axes}. Pixels: {store.info.dtype.name}."


def _opening(store: Description) -> str:
    tile, region = (" x ".join(map(str, shape)) for shape in (store.grid.tile, store.grid.region))
    return f"""\
pip install stackbound zarr
python -c "import zarr; print(zarr.open('PATH_OF_THIS_STORE')['0'].info)"
Programs that read OME-Zarr 0.5 through zarr-python open it as soon as stackbound is installed beside them.
One tile ({tile}) is decoded on its own; one shard file holds {region} pixels.
Without stackbound: DECODE.txt beside this file says how the bytes are laid out, and decode.py decodes them with numpy
alone: python decode.py PATH_OF_THIS_STORE TARGET.npy"""


def _citing(store: Description) -> str:
    return f"""\
State in the methods section: maximum absolute error {", ".join(store.promise.stored)} (stored pixel values), share of
changed pixels (in the totals of the log), noise level of the source, stackbound {store.version}."""

"""The benchmark measures what it says."""

import json
import math
import sys
from pathlib import Path

import numpy as np
import pytest
from stackbound_synthetic import Camera, ct_phantom, electron_micrograph, light_sheet, write_ome_tiff

sys.path.insert(0, str(Path(__file__).resolve().parent))

import report
import run
from coders import Coder, Encoded, NearLosslessStandard, RoundShuffleZstd, TileCodec, round_to
from compare import Measurement, compare, largest_error
from noise import entropy, measured_noise, tolerance_for
from stackbound.stages import StackInfo
from stacks import Stack, find, load


def _stack(pixels: np.ndarray, name: str = "s") -> Stack:
    return Stack(name, StackInfo("test", "tczyx"[-pixels.ndim :], pixels.shape, pixels.dtype), pixels)


@pytest.mark.parametrize("sigma", [3.0, 17.0])
def test_noise_of_a_slope_with_known_noise_is_found(sigma: float) -> None:
    """The estimate is the standard deviation of Gaussian noise on a smooth picture, within 3 %."""
    random = np.random.default_rng(1)
    ramp = np.add.outer(np.arange(256), np.arange(256)) * 3.0 + 1000
    plane = np.rint(ramp + random.normal(0, sigma, ramp.shape)).astype(np.uint16)

    assert measured_noise(plane[None]) == pytest.approx(math.hypot(sigma, 12**-0.5), rel=0.03)


def test_padding_does_not_count_as_quiet() -> None:
    """A constant border, however large, leaves the estimate where it was."""
    random = np.random.default_rng(2)
    inside = np.rint(random.normal(500, 8, (128, 128))).astype(np.int16)
    padded = np.pad(inside, 200, constant_values=-2000)

    assert measured_noise(padded) == pytest.approx(measured_noise(inside), rel=0.05)


def test_tolerances_are_whole_for_integers() -> None:
    """Multiples of the noise become whole numbers, never 0 unless lossless; for floats they stay as they are."""
    integers = np.dtype(np.uint16)

    assert [tolerance_for(5.19, m, integers) for m in (0, 0.5, 1, 2)] == [0, 3, 5, 10]
    assert tolerance_for(0.4, 0.5, integers) == 1
    assert tolerance_for(0.4, 0.5, np.dtype(np.float32)) == 0.2


@pytest.mark.parametrize("coder", [NearLosslessStandard(), RoundShuffleZstd(), TileCodec("stackbound")])
@pytest.mark.parametrize("tolerance", [0, 1, 7, 200])
@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int16"])
def test_every_coder_keeps_the_tolerance(coder: Coder, tolerance: int, dtype: str) -> None:
    """All coders are compared at the same promise: none errs by more than the tolerance, dark planes included."""
    made = ct_phantom((3, 48, 70)).astype(np.int64)
    made[1] = made[1].min()
    limits = np.iinfo(dtype)
    lowest = -2000 if dtype == "int16" else 0
    stack = _stack((made - made.min() + lowest).clip(limits.min, limits.max).astype(dtype))
    encoded = coder.encode(stack, tolerance)
    decoded = coder.decode(stack, encoded)

    assert decoded.dtype == stack.pixels.dtype
    assert largest_error(stack, decoded) <= tolerance
    assert encoded.size >= sum(map(len, encoded.payloads))


def test_rounding_uses_the_coarsest_grid() -> None:
    """Rounded integers lie on multiples of 2E+1 and use the whole tolerance."""
    values = np.arange(1000, dtype=np.uint16)
    rounded = round_to(values, 4)

    assert set(np.unique(rounded) % 9) == {0}
    assert np.abs(rounded.astype(int) - values.astype(int)).max() == 4


def test_a_broken_promise_is_reported() -> None:
    """A coder that errs by more than the tolerance is named as broken."""

    class Wrong(Coder):
        name = "wrong"

        def encode(self, stack: Stack, tolerance: float) -> Encoded:
            return Encoded([b"x"], 1)

        def decode(self, stack: Stack, encoded: Encoded) -> np.ndarray:
            return stack.pixels + 5

    (row,) = compare(_stack(np.zeros((1, 8, 8), np.uint8)), [Wrong()], [(1, 2)], noise=2, repeat=1)

    assert row.largest_error == 5
    assert row.note.startswith("BROKEN")


def test_entropy_of_a_stack_is_the_mean_over_its_pixels() -> None:
    """The floor of a stack with two levels of light is the mean of their two entropies."""
    camera = Camera()
    electrons = np.repeat(np.array([10.0, 500.0], np.float32), 1000)

    assert entropy(camera, electrons)(3) == pytest.approx((camera.bits(10.0, 3) + camera.bits(500.0, 3)) / 2, abs=1e-6)


def test_entropy_is_what_an_ideal_coder_spends() -> None:
    """Coding each recorded pixel under its exact distribution costs the stated floor, within the sampling error."""
    stack = light_sheet((2, 96, 96))
    electrons = np.stack([stack.electrons(1, z) for z in (0, 1)]).ravel()
    pixels = np.stack([stack.plane(1, z) for z in (0, 1)]).ravel()
    tolerance, costs = 2, []
    for e, value in zip(electrons[::23], pixels[::23], strict=True):
        first, probabilities = stack.camera.probabilities(float(e))
        centre = round(stack.camera.gain * float(e) + stack.camera.offset)
        step = (int(value) - centre + tolerance) // (2 * tolerance + 1)
        inside = slice(
            max(0, centre + (2 * tolerance + 1) * step - tolerance - first),
            max(0, centre + (2 * tolerance + 1) * step + tolerance + 1 - first),
        )
        costs.append(-math.log2(probabilities[inside].sum()))

    assert entropy(stack.camera, electrons)(tolerance) == pytest.approx(
        np.mean(costs), abs=4 * np.std(costs) / math.sqrt(len(costs))
    )


def test_ratios_are_geometric_means_over_the_stacks_both_can_code() -> None:
    """2 and 8 times smaller are 4 times in the mean; a stack that the standard cannot code does not count."""
    about = ((1, 8, 8), "uint16", 1.0, 1.0, 1)
    rows = [
        Measurement("a", *about, report.STANDARD, bits=8, encode=10, decode=10),
        Measurement("a", *about, "ours", bits=4, encode=20, decode=40, planning=0.1),
        Measurement("b", *about, report.STANDARD, bits=8, encode=10, decode=10),
        Measurement("b", *about, "ours", bits=1, encode=20, decode=10, planning=0.3),
        Measurement("c", *about, report.STANDARD, note="not possible"),
        Measurement("c", *about, "ours", bits=1, encode=1, decode=1),
    ]
    (found,) = report.summaries(rows)

    assert found["stacks"] == 2
    assert found["smaller"] == pytest.approx(4)
    assert found["smaller_worst"] == ["a", 2]
    assert (found["encode_faster"], found["decode_faster"]) == (pytest.approx(2), pytest.approx(2))
    assert found["planning_most"] == 0.3


def test_the_command_measures_a_folder(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One command measures all stacks of a folder and writes JSON and a plot."""
    write_ome_tiff(tmp_path / "one.ome.tif", light_sheet((2, 64, 64)))
    write_ome_tiff(tmp_path / "two.ome.tif", electron_micrograph((2, 64, 64)))
    names = ["--only", "one.ome.tif", "--only", "two.ome.tif", "--extra", "one.ome.tif=300"]
    words = ["--repeat", "1", "--stage", "predict=none", "--tolerances", "0,1", "--out", str(tmp_path / "out")]
    code = run.main([str(tmp_path), *names, *words])
    content = json.loads((tmp_path / "out" / "benchmark.json").read_text(encoding="utf-8"))
    printed = capsys.readouterr().out

    assert code == 0
    assert {row["coder"] for row in content["measurements"]} == {"stackbound", "predict=none", "14495-1", "zstd-9"}
    assert "the standard's largest tolerance is 255" in printed
    assert all(row["largest_error"] <= row["tolerance"] for row in content["measurements"] if row["bits"])
    table = (tmp_path / "out" / "benchmark.md").read_text(encoding="utf-8")
    assert table.count("| one.ome.tif |") == 3
    assert table.count("| two.ome.tif |") == 2
    assert (tmp_path / "out" / "benchmark.png").stat().st_size > 10_000


PLUGIN = """
import numpy as np
from stackbound import hookimpl
from stackbound.stages import Options, Quantize

class CoarseOptions(Options):
    pass

class Coarse(Quantize):
    name = "coarse"
    Options = CoarseOptions
    def indices(self, coefficients, steps, tolerance):
        return np.rint(coefficients / steps / 8).astype(np.int32) * 8

@hookimpl
def stackbound_stages():
    return [Coarse]
"""


def test_a_stage_of_anyone_is_measured_beside_the_built_in(tmp_path: Path, fresh_registry: None) -> None:
    """A quantizer from a file is measured by its name, keeps the tolerance, and costs what it costs."""
    (tmp_path / "coarse.py").write_text(PLUGIN, encoding="utf-8")
    write_ome_tiff(tmp_path / "one.ome.tif", light_sheet((2, 96, 96)))
    words = ["--only", "one.ome.tif", "--repeat", "1", "--tolerances", "1", "--plugin", str(tmp_path / "coarse.py")]
    stages = ["--stage", "predict=transform,quantize=coarse", "--stage", "predict=transform,quantize=uniform"]
    assert run.main([str(tmp_path), *words, *stages, "--out", str(tmp_path / "out")]) == 0
    content = json.loads((tmp_path / "out" / "benchmark.json").read_text(encoding="utf-8"))
    rows = {row["coder"]: row for row in content["measurements"]}

    assert rows["predict=transform,quantize=coarse"]["largest_error"] <= rows["stackbound"]["tolerance"]
    assert rows["predict=transform,quantize=coarse"]["bits"] > rows["predict=transform,quantize=uniform"]["bits"]


def test_sources_are_found_in_natural_order(tmp_path: Path) -> None:
    """Stack 2 comes before stack 10, and other files are left out."""
    for name in ("s10", "s2"):
        (tmp_path / name).mkdir()
    (tmp_path / "README.md").write_text("no stack", encoding="utf-8")

    assert [path.name for path in find(tmp_path)] == ["s2", "s10"]


def test_dicom_values_are_the_stored_ones() -> None:
    """A DICOM file of pydicom's own comes in as stored, without rescaling."""
    from pydicom.data import get_testdata_file

    path = get_testdata_file("CT_small.dcm")
    assert isinstance(path, str)
    stack = load(Path(path))

    assert stack.pixels.shape == (128, 128)
    assert stack.pixels.dtype == np.int16
    assert int(stack.pixels[0, 0]) == 175

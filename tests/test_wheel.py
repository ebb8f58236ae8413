"""The wheel: what a device downloads. Built offline, from what is installed here."""

import importlib.util
import pathlib
import zipfile

import pytest

ROOT = pathlib.Path(__file__).parents[1]
MOST_BYTES = 8_000_000


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    spec = importlib.util.spec_from_file_location("bench_cold_start", ROOT / "bench_streams" / "bench_cold_start.py")
    bench = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(bench)
    return bench.build_wheel(tmp_path_factory.mktemp("wheel"))


def test_the_wheel_forecasters_included_is_at_most_8_megabytes(wheel):
    print(f"{wheel.stat().st_size / 1e6:.2f} MB")
    assert wheel.stat().st_size <= MOST_BYTES


def test_the_wheel_holds_every_module_forecaster_and_schema_and_nothing_else(wheel):
    with zipfile.ZipFile(wheel) as archive:
        held = {name for name in archive.namelist() if ".dist-info/" not in name}
    package = {path.relative_to(ROOT).as_posix() for kind in ("*.py", "*.json") for path in (ROOT / "hyperforecast").rglob(kind)}
    models = {f"hyperforecast/models/{path.name}" for kind in ("*.py", "*.forecaster")
              for path in (ROOT / "models").glob(kind)}
    assert held == package | models and len(models) >= 4

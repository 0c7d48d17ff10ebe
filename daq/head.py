"""The head of a journal: everything a run is computed from, so that nothing else is needed to redo it."""

from __future__ import annotations

import importlib.metadata
import platform
import sqlite3
from functools import lru_cache
from pathlib import Path
from typing import Any

from daq.files import shipped_folder
from daq.nightfile import LoadedNight
from daq.plan import draw_up
from daq.records import FORMAT, run_identity
from daq.spectrum import Spectrum, read_spectrum
from daq.target import LoadedTarget
from drivers.bench import LoadedBench

SHIPPED = "shipped:"
PACKAGES = ("gratingd", "numpy", "scipy", "h5py", "pydantic")


def make_head(
    bench: LoadedBench,
    target: LoadedTarget,
    *,
    night: LoadedNight | None,
    night_start_utc_ns: int,
    created_utc_ns: int,
    ordinal: int,
    attempt: int,
    seed: int,
    operator: str | None,
    confirmed: dict[str, Any] | None = None,
) -> dict[str, Any]:
    """Raises SettingsError when the bench cannot do what the target asks, DataError for its spectrum."""
    spectrum = None if bench.spectrum_path is None else read_spectrum(bench.spectrum_path)
    plan, question = draw_up(bench, target, spectrum)
    run_id = run_identity(
        night_start_utc_ns=night_start_utc_ns,
        bench_slug=bench.slug,
        ordinal=ordinal,
        target_slug=target.slug,
        serial_slug=target.serial_slug,
        attempt=attempt,
    )
    return {
        "format": FORMAT,
        "run_id": run_id,
        "night": None if night is None else night.night.name,
        "night_file": None if night is None else _file(night.night.name, night),
        "night_start_utc_ns": night_start_utc_ns,
        "created_utc_ns": created_utc_ns,
        "ordinal": ordinal,
        "attempt": attempt,
        "seed": seed,
        "operator": operator,
        "confirmed": confirmed,
        "specimen_serial": target.target.specimen_serial,
        "target": _file(target.target.name, target),
        "bench": _file(bench.bench.name, bench) | {"path": place_of(bench.path)},
        "spectrum": None if spectrum is None else _spectrum(spectrum),
        "plan": plan,
        "question": question,
        "software": dict(software()),
    }


@lru_cache(maxsize=1)
def software() -> dict[str, str]:
    """What computes here: numbers may differ in their last bits between versions and processors."""
    versions = {name: importlib.metadata.version(name) for name in PACKAGES}
    return versions | {
        "python": platform.python_version(),
        "sqlite": sqlite3.sqlite_version,
        "system": platform.system(),
        "machine": platform.machine(),
        "cpu": _cpu_model(),
        "blas": _blas(),
    }


def _cpu_model() -> str:
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8", errors="replace").splitlines()
    except OSError:
        return platform.processor()
    models = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return models[0] if models else platform.processor()


def _blas() -> str:
    import numpy as np

    config = np.show_config(mode="dicts")
    blas = config["Build Dependencies"]["blas"] if isinstance(config, dict) else {}
    return " ".join(str(blas.get(key, "")) for key in ("name", "version", "openblas configuration")).strip()


def place_of(path: Path) -> str:
    """A settings file's place as a head names it: `shipped:benches/...` or an absolute path."""
    shipped, where = shipped_folder().resolve(), path.resolve()
    if where.is_relative_to(shipped):
        return SHIPPED + where.relative_to(shipped).as_posix()
    return str(where)


def path_of(place: str) -> Path:
    """The inverse of `place_of`."""
    return shipped_folder() / place.removeprefix(SHIPPED) if place.startswith(SHIPPED) else Path(place)


def _file(name: str, loaded: LoadedBench | LoadedTarget | LoadedNight) -> dict[str, Any]:
    return {"name": name, "slug": loaded.slug, "text": loaded.text, "sha256": loaded.sha256}


def _spectrum(spectrum: Spectrum) -> dict[str, Any]:
    return {"path": Path(spectrum.path).name, "sha256": spectrum.sha256, "text": spectrum.text}

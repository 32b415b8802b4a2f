"""Writing results so that a crash, a kill or a full disk leaves the former ones, or none, never half."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

from gravbasin.errors import CannotFinish, InputError
from gravbasin.scenario_file import scenario_toml

if TYPE_CHECKING:
    from gravbasin.runs.assess import Assessment

__all__ = ["replaced_folder", "write_run", "write_text"]

MARK = "verdict.json"


@contextmanager
def replaced_folder(folder: Path, *, mark: str = MARK) -> Iterator[Path]:
    """A fresh folder to fill, which takes the place of `folder` when the block ends without error.

    Parameters
    ----------
    folder : Path
        Where the result shall be. An existing one is replaced only if it is empty or holds `mark`, the file by which
        a former result is known: nobody's other files are ever deleted.
    mark : str
        Name of that file.

    Raises
    ------
    InputError
        `folder` is a file, or a folder with other things in it.
    CannotFinish
        The disk is full or the place cannot be written.
    """
    folder = folder.absolute()
    if folder.exists() and not folder.is_dir():
        raise InputError("output folder", folder, "is a file", "choose another folder with -o")
    if folder.is_dir() and any(folder.iterdir()) and not (folder / mark).exists():
        raise InputError("output folder", folder, "holds files that are not a gravbasin run", "choose another with -o")
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", suffix=".partial", dir=folder.parent))
    except OSError as error:
        raise CannotFinish(
            f"output folder {folder}: cannot be made ({error.strerror}); choose another with -o"
        ) from error
    try:
        yield fresh
        fresh.chmod(0o755)
        _exchange(fresh, folder)
    except OSError as error:
        raise CannotFinish(
            f"output folder {folder}: cannot be written ({error.strerror}); nothing was changed"
        ) from error
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def _exchange(fresh: Path, folder: Path) -> None:
    """Move `fresh` to `folder`; the former folder comes back if that fails."""
    if not folder.exists():
        os.replace(fresh, folder)
        return
    former = fresh.with_suffix(".former")
    os.replace(folder, former)
    try:
        os.replace(fresh, folder)
    except BaseException:
        os.replace(former, folder)
        raise
    shutil.rmtree(former, ignore_errors=True)


def write_text(path: Path, text: str) -> None:
    """Write a text file whole or not at all."""
    descriptor, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".partial", dir=path.parent)
    try:
        with os.fdopen(descriptor, "w", encoding="utf-8") as handle:
            handle.write(text)
        os.chmod(name, 0o644)
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise


def write_run(result: Assessment, folder: Path) -> None:
    """Write the run folder of an assessment: verdict, report, section, anomaly, profile, figures, scenario."""
    from gravbasin.report.html import assessment_report
    from gravbasin.runs.search import candidate_table

    with replaced_folder(folder) as fresh:
        result.modelled.section.to_netcdf(fresh / "section.nc", engine="h5netcdf")
        result.modelled.grid.to_dataset(name="modelled").to_netcdf(fresh / "anomaly.nc", engine="h5netcdf")
        if result.comparison is not None:
            maps = result.comparison.maps.assign(log_odds=result.comparison.odds)
            maps.to_netcdf(fresh / "map.nc", engine="h5netcdf")
        result.profile.to_netcdf(fresh / "profile.nc", engine="h5netcdf")
        if "search" in result.verdict:
            candidate_table(list(result.candidates)).to_csv(fresh / "candidates.csv", index=False)
        (fresh / "scenario.toml").write_text(scenario_toml(result.scenario), encoding="utf-8")
        report, figures = assessment_report(result)
        (fresh / "figures").mkdir()
        for name, svg in figures.items():
            (fresh / "figures" / f"{name}.svg").write_text(svg, encoding="utf-8")
        (fresh / "report.html").write_text(report, encoding="utf-8")
        (fresh / MARK).write_text(json.dumps(result.verdict, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")

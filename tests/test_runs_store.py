"""Run folders are whole or absent, and nobody else's files are touched."""

import os
import signal
import subprocess
import sys
import textwrap
import time

import pytest

from gravbasin.errors import CannotFinish, InputError
from gravbasin.runs.store import replaced_folder, write_text


def _fill(folder, text):
    with replaced_folder(folder) as fresh:
        (fresh / "verdict.json").write_text(text)
        (fresh / "section.nc").write_text(text)


def _leftovers(folder):
    return [p.name for p in folder.parent.iterdir() if p.name != folder.name]


def test_a_new_folder_replaces_the_former_whole(tmp_path):
    folder = tmp_path / "run"
    _fill(folder, "first")
    (folder / "figures").mkdir()
    _fill(folder, "second")
    assert sorted(p.name for p in folder.iterdir()) == ["section.nc", "verdict.json"]
    assert (folder / "verdict.json").read_text() == "second"
    assert _leftovers(folder) == []


def test_a_fault_while_writing_keeps_the_former(tmp_path):
    folder = tmp_path / "run"
    _fill(folder, "first")

    def interrupted():
        with replaced_folder(folder) as fresh:
            (fresh / "verdict.json").write_text("half")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        interrupted()
    assert (folder / "verdict.json").read_text() == "first"
    assert _leftovers(folder) == []


def test_a_full_disk_is_one_line_and_keeps_the_former(tmp_path):
    folder = tmp_path / "run"
    _fill(folder, "first")
    with pytest.raises(CannotFinish, match="nothing was changed"), replaced_folder(folder):
        raise OSError(28, "No space left on device")
    assert (folder / "verdict.json").read_text() == "first"


def test_foreign_files_are_never_replaced(tmp_path):
    folder = tmp_path / "thesis"
    folder.mkdir()
    (folder / "chapter1.tex").write_text("years of work")
    with pytest.raises(InputError, match="not a gravbasin run"):
        _fill(folder, "oops")
    assert (folder / "chapter1.tex").read_text() == "years of work"


def test_a_file_in_the_way_is_refused(tmp_path):
    (tmp_path / "run").write_text("a file")
    with pytest.raises(InputError, match="is a file"):
        _fill(tmp_path / "run", "x")


def test_text_files_are_replaced_whole(tmp_path):
    target = tmp_path / "a.toml"
    write_text(target, "one")
    write_text(target, "two")
    assert target.read_text() == "two"
    assert _leftovers(target) == []


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="needs a signal that cannot be caught")
def test_a_killed_writer_leaves_the_former_or_the_new_folder(tmp_path):
    """Killed eight times in the middle of replacing the folder over and over; what stands is always whole."""
    folder = tmp_path / "run"
    _fill(folder, "0" * 5000)
    code = textwrap.dedent(
        f"""
        from pathlib import Path
        from gravbasin.runs.store import replaced_folder
        print("ready", flush=True)
        for i in range(1_000_000):
            with replaced_folder(Path({str(folder)!r})) as fresh:
                for name in ("verdict.json", "section.nc"):
                    (fresh / name).write_text(str(i % 10) * 5000)
        """
    )
    for delay in (0.01, 0.03, 0.05, 0.08, 0.11, 0.14, 0.17, 0.2):
        process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE)
        assert process.stdout is not None
        process.stdout.readline()
        time.sleep(delay)
        os.kill(process.pid, signal.SIGKILL)
        process.wait()
        process.stdout.close()
        if folder.exists():
            texts = {p.name: p.read_text() for p in folder.iterdir()}
            assert set(texts) == {"verdict.json", "section.nc"}
            assert len(set(texts.values())) == 1
            assert len(texts["verdict.json"]) == 5000
        else:
            _fill(folder, "0" * 5000)

"""Results folders that appear complete or not at all."""

import hashlib
import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from fluvinv.errors import OutputError

RECORD_NAME = "run.json"


def fingerprint(settings: dict, inputs: list[dict], version: str) -> str:
    """SHA-256 of what a result depends on: settings (but for the folder's name), inputs and the version."""
    kept = {key: value for key, value in settings.items() if key != "output"}
    kept["output"] = {key: value for key, value in settings.get("output", {}).items() if key != "directory"}
    text = json.dumps([kept, [item["sha256"] for item in inputs], version], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()


def sha256_of(path: Path) -> str:
    """SHA-256 of a file's bytes."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def read_record(folder: Path) -> dict | None:
    """The record of a results folder of ours, or None when the folder is not one."""
    try:
        record = json.loads((folder / RECORD_NAME).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return record if isinstance(record, dict) and "fingerprint" in record else None


def already_done(folder: Path, wanted: str, stages: tuple[str, ...]) -> bool:
    """Whether the folder already holds the finished result of the same inputs and settings."""
    record = read_record(folder)
    return record is not None and record["fingerprint"] == wanted and record.get("stage") in stages


def check_target(folder: Path, inputs: list[Path], wanted: str, overwrite: bool) -> None:
    """Refuse a results folder that must not be written.

    Raises
    ------
    OutputError
        If it is a file, holds an input, holds something that is no result of ours, or holds another result
        and overwriting was not asked for.
    """
    try:
        if not folder.exists():
            return
        if not folder.is_dir():
            raise OutputError(f"{folder}: a file stands where the results folder should go. Choose another folder.")
        real = folder.resolve()
        inside = [path for path in inputs if real in path.resolve().parents]
        if inside:
            raise OutputError(
                f"{folder}: the results folder holds the input {inside[0].name}. Choose a folder of its own"
                " (output.directory or --output)."
            )
        if not any(folder.iterdir()):
            return
    except OSError as error:
        if isinstance(error, OutputError):
            raise
        raise OutputError(f"{folder}: cannot be looked into: {error.strerror}.") from error
    record = read_record(folder)
    if record is None:
        raise OutputError(
            f"{folder}: holds files that are no results of fluvinv; it is never replaced. Choose another."
        )
    grown = record.get("stage") == "network" and record["fingerprint"] == wanted
    if not overwrite and not grown:
        raise OutputError(
            f"{folder}: already holds the results of other settings or inputs. Choose another folder, or --overwrite."
        )


@contextmanager
def results_folder(folder: Path) -> Iterator[Path]:
    """Yield a folder to write into that takes the final name when all went well, and vanishes otherwise.

    Parameters
    ----------
    folder : Path
        Final name; what stands there (already checked by `check_target`) is replaced at the end.

    Raises
    ------
    OutputError
        If something cannot be written.
    """
    folder = folder.absolute()
    made = [parent for parent in folder.parents if not parent.exists()]
    staging = folder.parent / f".{folder.name}.{os.getpid()}.partial"
    done = False
    try:
        staging.mkdir(parents=True)
        yield staging
        _replace(folder, staging)
        done = True
    except OSError as error:
        if isinstance(error, OutputError):
            raise
        raise OutputError(f"{folder}: cannot be written: {error.strerror or error}.") from error
    finally:
        if not done:
            shutil.rmtree(staging, ignore_errors=True)
            for parent in made:
                try:
                    parent.rmdir()
                except OSError:
                    break


def _replace(folder: Path, staging: Path) -> None:
    """Move the staged folder to its final name, what stood there out of the way first."""
    if not folder.exists():
        staging.rename(folder)
        return
    old = folder.parent / f".{folder.name}.{os.getpid()}.replaced"
    folder.rename(old)
    try:
        staging.rename(folder)
    except OSError:
        old.rename(folder)
        raise
    shutil.rmtree(old, ignore_errors=True)

"""Results folders that appear complete or not at all."""

import hashlib
import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
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
            _check_parents(folder)
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


def _check_parents(folder: Path) -> None:
    """Refuse a folder that would lie below a file."""
    lowest = next(parent for parent in folder.absolute().parents if parent.exists())
    if not lowest.is_dir():
        raise OutputError(f"{folder}: cannot be made, for {lowest} is a file. Choose another folder.")


def write_text(path: Path, text: str, overwrite: bool, inputs: list[Path]) -> None:
    """Write a text file that appears complete or not at all, in a folder that is made where needed.

    Raises
    ------
    OutputError
        If the file is an input, exists and is not to be replaced, or cannot be written.
    """
    partial = path.with_name(f".{path.name}.{os.getpid()}.partial")
    try:
        if path.exists():
            if any(path.samefile(item) for item in inputs):
                raise OutputError(f"{path}: would replace the input of this name. Give --output another folder.")
            if not overwrite:
                raise OutputError(f"{path}: exists already. Give --overwrite to replace it, or another --output.")
        _check_parents(path)
        with _made_parents(path):
            try:
                partial.write_text(text, encoding="utf-8")
                partial.replace(path)
            finally:
                partial.unlink(missing_ok=True)
    except OSError as error:
        raise _cannot_write(path, error) from error


def _cannot_write(path: Path, error: OSError) -> OutputError:
    """Turn what the file system said into an error of ours; one of ours stays as it is."""
    if isinstance(error, OutputError):
        return error
    return OutputError(f"{path}: cannot be written: {error.strerror or error}.")


@contextmanager
def _made_parents(path: Path) -> Iterator[None]:
    """Make the folders above a path, and take those that were made away again where the path does not come to be."""
    missing = [parent for parent in path.parents if not parent.exists()]
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        yield
    finally:
        if not path.exists():
            with suppress(OSError):
                for parent in missing:
                    parent.rmdir()


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
    folder = folder.resolve()  # a link stays, and what it leads to is replaced
    staging, old = (folder.with_name(f".{folder.name}.{os.getpid()}.{kind}") for kind in ("partial", "replaced"))
    try:
        with _made_parents(folder):
            try:
                staging.mkdir()
                yield staging
                if folder.exists():
                    folder.rename(old)
                staging.rename(folder)
            finally:
                _put_right(folder, staging, old)
    except OSError as error:
        raise _cannot_write(folder, error) from error


def _put_right(folder: Path, staging: Path, old: Path) -> None:
    """Leave one whole folder or none, wherever the work stopped; a second Ctrl-C in here does not stop it."""
    try:
        if old.exists() and not folder.exists():
            old.rename(folder)
        for leftover in (staging, old):
            shutil.rmtree(leftover, ignore_errors=True)
    except KeyboardInterrupt:
        _put_right(folder, staging, old)
        raise

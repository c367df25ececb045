"""The same settings on many matrices, one row each; a matrix that fails is a row with its reason."""

from __future__ import annotations

import csv
import glob
import io
import json
import os
import threading
from collections.abc import Callable, Iterable, Iterator, Sized
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from schurbench.comparison.compare import Figures, figures_of, need_pandas
from schurbench.errors import InputError, SchurbenchError
from schurbench.intake import load
from schurbench.iteration import iterate
from schurbench.journal import Run, is_run
from schurbench.prepare.plain import plain, plural
from schurbench.saving import write_whole

__all__ = ["Survey", "SurveyRow", "survey"]

_READABLE = (".npy", ".npz", ".mtx", ".mtx.gz", ".mat", ".csv", ".tsv", ".txt")
_OUTPUTS = (".csv", ".json")

#: What stands beside saved factors (`schurbench.factors`, a later room, writes it).
_MANIFEST = ".manifest.json"


@dataclass(frozen=True, slots=True)
class SurveyRow:
    """One matrix of a survey.

    Attributes
    ----------
    name : str
    source : str
    n : int or None
        None when the matrix could not be loaded.
    dtype : str
    sha256 : str
    figures : Figures or None
    condition : float or None
        Largest condition number of an eigenvalue.
    cause : str
        Code of the first finding of the diagnosis.
    finding : str
        Its statement.
    error : str or None
        One line when loading or running failed.
    """

    name: str
    source: str
    n: int | None = None
    dtype: str = ""
    sha256: str = ""
    figures: Figures | None = None
    condition: float | None = None
    cause: str = ""
    finding: str = ""
    error: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready and flat: the figures stand beside the other fields."""
        own = {name: getattr(self, name) for name in self.__dataclass_fields__ if name != "figures"}
        error = own.pop("error")
        figures = dict.fromkeys(Figures.__dataclass_fields__) if self.figures is None else asdict(self.figures)
        flat: dict[str, Any] = plain({**own, **figures, "error": error})
        return flat


@dataclass(frozen=True, slots=True)
class Survey:
    """Rows in the order of the source.

    Attributes
    ----------
    rows : tuple of SurveyRow
    left_out : tuple of str
        Files of a folder or pattern that this package wrote itself: saved runs, factors with a manifest, the table
        that is being replaced.
    """

    rows: tuple[SurveyRow, ...]
    left_out: tuple[str, ...] = ()

    @property
    def failures(self) -> tuple[SurveyRow, ...]:
        """Rows that could not be loaded or run."""
        return tuple(row for row in self.rows if row.error is not None)

    @property
    def sentence(self) -> str:
        """The outcome in words."""
        converged = sum(1 for row in self.rows if row.figures is not None and row.figures.converged)
        passed = sum(1 for row in self.rows if row.figures is not None and row.figures.passed)
        own = f" Left out as results of earlier work: {', '.join(self.left_out)}." if self.left_out else ""
        return (
            f"{plural(len(self.rows), 'matrix', 'matrices')}: {converged} converged, {passed} with factors that pass, "
            f"{len(self.failures)} failed.{own}"
        )

    def table(self) -> Any:
        """One row a matrix, as a pandas frame.

        Raises
        ------
        InputError
            pandas is not installed.
        """
        return need_pandas().DataFrame([row.to_dict() for row in self.rows], columns=_columns())

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "sentence": self.sentence,
            "rows": [row.to_dict() for row in self.rows],
            "left_out": list(self.left_out),
        }

    def save(self, path: str | Path, replace: bool = False) -> Path:
        """Write the rows as ``.csv`` or ``.json``; the file is either whole or not there.

        Raises
        ------
        InputError
            Another suffix, or a file that exists already.
        """
        path = Path(path)
        _check_output(path, replace)
        if path.suffix.lower() == ".json":
            text = json.dumps(self.to_dict(), indent=1, allow_nan=False, ensure_ascii=False) + "\n"
        else:
            buffer = io.StringIO(newline="")
            writer = csv.DictWriter(buffer, _columns(), lineterminator="\n")
            writer.writeheader()
            writer.writerows(row.to_dict() for row in self.rows)
            text = buffer.getvalue()
        return write_whole(path, lambda stream: stream.write(text.encode()), replace=replace)


def survey(
    source: Any,
    out: str | Path | None = None,
    replace: bool = False,
    progress: Callable[[str, int, int], object] | None = None,
    cancel: threading.Event | None = None,
    **settings: Any,
) -> Survey:
    """Run one set of settings on many matrices.

    Parameters
    ----------
    source : path, pattern or iterable
        A folder (every file of a readable kind in it, by name), a pattern such as ``"models/*.mtx"``, a ``.npz`` or
        ``.mat`` file with several square arrays, or an iterable of what `schurbench.load` accepts. Saved runs and
        factors found in a folder or by a pattern are left out.
    out : path, optional
        ``.csv`` or ``.json`` to write the rows to.
    replace : bool
        Whether `out` may be overwritten.
    progress : callable, optional
        Called before each matrix with its name, its place from 0, and how many there are (0 when not known).
    cancel : threading.Event, optional
        When set, the matrix in work stops with what it has and the others are left out.
    **settings
        Keywords of `schurbench.iterate`.

    Returns
    -------
    Survey

    Raises
    ------
    InputError
        There is nothing to survey, or `out` cannot be written.
    """
    if out is not None:
        _check_output(Path(out), replace)
    items, count, left_out = _items(source, None if out is None else Path(out))
    rows: list[SurveyRow] = []
    for place, (name, origin, key) in enumerate(items):
        if cancel is not None and cancel.is_set():
            break
        if progress is not None:
            progress(name, place, count)
        rows.append(_row(name, origin, key, cancel, settings))
    result = Survey(tuple(rows), left_out)
    if out is not None:
        result.save(out, replace=replace)
    return result


def _row(
    name: str, origin: Any, key: str | None, cancel: threading.Event | None, settings: dict[str, Any]
) -> SurveyRow:
    source = str(origin) if isinstance(origin, str | os.PathLike) else type(origin).__name__
    try:
        m = load(origin, key=key)
    except SchurbenchError as error:
        return SurveyRow(name, source, error=str(error))
    name = name if key is not None else m.name
    try:
        run = iterate(m, cancel=cancel, **settings)
        figures = figures_of(run)
        cause, finding = _first_finding(run)
        condition = _worst_condition(run)
    except Exception as error:  # one matrix must not end a survey of many
        kind = "" if isinstance(error, SchurbenchError) else f"{type(error).__name__}: "
        return SurveyRow(name, m.source, m.n, m.array.dtype.name, m.sha256, error=kind + " ".join(str(error).split()))
    return SurveyRow(name, m.source, m.n, m.array.dtype.name, m.sha256, figures, condition, cause, finding)


def _worst_condition(run: Run) -> float | None:
    if not run.settings.accumulate:
        return None
    condition = run.factors().certificate().condition
    found = condition[~np.isnan(condition)]
    return float(found.max()) if found.size else None


def _first_finding(run: Run) -> tuple[str, str]:
    from schurbench.diagnosis import diagnose

    findings = diagnose(run).findings
    return (str(findings[0].cause), str(findings[0].statement)) if findings else ("", "")


Item = tuple[str, Any, str | None]


def _items(source: Any, out: Path | None) -> tuple[Iterator[Item], int, tuple[str, ...]]:
    """What to load, each with a name and perhaps a key; how many, 0 when that is not known; and what is left out."""
    if isinstance(source, str | os.PathLike):
        found, left_out = _from_path(Path(source), out)
        if not found:
            own = f" but results of earlier work ({', '.join(left_out)})" if left_out else ""
            raise InputError(
                f"{source} has no matrix to survey{own}; give a folder, a pattern or an iterable of matrices"
            )
        return iter(found), len(found), left_out
    if not isinstance(source, Iterable):
        raise InputError(f"a {type(source).__name__} is nothing to survey; give a folder, a pattern or an iterable")
    count = len(source) if isinstance(source, Sized) else 0
    return ((_name(item, place), item, None) for place, item in enumerate(source)), count, ()


def _name(item: Any, place: int) -> str:
    if isinstance(item, str | os.PathLike):
        return Path(item).name
    return str(getattr(item, "name", f"matrix {place}"))


def _from_path(path: Path, out: Path | None) -> tuple[list[Item], tuple[str, ...]]:
    if path.is_file():
        return [(f"{path.name}: {key}", path, key) for key in _square_keys(path)] or [(path.name, path, None)], ()
    if path.is_dir():
        files = sorted(file for file in path.iterdir() if file.is_file() and file.name.lower().endswith(_READABLE))
    else:
        files = [Path(file) for file in sorted(glob.glob(str(path)))]  # noqa: PTH207  # absolute patterns too
    own = [file for file in files if _is_result(file, out)]
    return [(file.name, file, None) for file in files if file not in own], tuple(file.name for file in own)


def _is_result(file: Path, out: Path | None) -> bool:
    """Whether a file is a saved run, factors beside their manifest, or the table about to be replaced."""
    if out is not None and out.exists() and file.samefile(out):
        return True
    stem = file.name.removesuffix(file.suffix)
    whole = stem.removesuffix("_T").removesuffix("_Z") + file.suffix  # Matrix Market holds one factor a file
    return is_run(file) or any((file.parent / (name + _MANIFEST)).exists() for name in (file.name, whole))


def _square_keys(path: Path) -> list[str]:
    """Names of the square arrays of numbers in a file, read off their headers."""
    try:
        if path.suffix.lower() == ".npz":
            return _square_members(path)
        if path.suffix.lower() == ".mat":
            from scipy.io import whosmat

            numbers = {"double", "single", "sparse", "logical"}
            return [
                str(name)
                for name, shape, kind in whosmat(str(path))
                if kind in numbers and len(shape) == 2 and shape[0] == shape[1] > 0
            ]
    except (OSError, ValueError, NotImplementedError):  # `load` says what is wrong, or reads it another way
        return []
    return []


def _square_members(path: Path) -> list[str]:
    import zipfile

    keys: list[str] = []
    try:
        with zipfile.ZipFile(path) as archive:
            for member in archive.namelist():
                if not member.endswith(".npy"):
                    continue
                with archive.open(member) as stream:
                    version = np.lib.format.read_magic(stream)
                    reader = (
                        np.lib.format.read_array_header_1_0
                        if version == (1, 0)
                        else np.lib.format.read_array_header_2_0
                    )
                    shape, _, dtype = reader(stream)
                if len(shape) == 2 and shape[0] == shape[1] > 0 and dtype.kind in "biufc":
                    keys.append(member.removesuffix(".npy"))
    except zipfile.BadZipFile:
        return []
    return keys


def _columns() -> list[str]:
    return list(SurveyRow("", "").to_dict())


def _check_output(path: Path, replace: bool) -> None:
    if path.suffix.lower() not in _OUTPUTS:
        raise InputError(f"a survey cannot be saved as {path.name!r}; end the name in {' or '.join(_OUTPUTS)}")
    if not path.parent.is_dir():
        raise InputError(f"there is no folder {str(path.parent)!r} to save in; create it first")
    if path.exists() and not replace:
        raise InputError(f"{path.name} exists already; choose another name, or overwrite with replace=True")

"""A saved manifest held against the files beside it: hashes, numbers and structure worked out again."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from schurbench.errors import InputError
from schurbench.factors.certificate import Certificate, certify
from schurbench.factors.triangular import Array, is_exact
from schurbench.factors.writers import FORMATS, MANIFEST_KIND, MANIFEST_VERSION, file_sha256, read_factor
from schurbench.intake import WorkingMatrix, load
from schurbench.measures import RATIO_LIMIT, orthogonality_ratio
from schurbench.prepare.plain import number, plain
from schurbench.prepare.preparation import single_blas_thread

__all__ = ["ManifestReport", "check_manifest"]

#: A manifest of the largest matrices is a few MB of eigenvalues; anything longer is no manifest.
_LONGEST_MANIFEST = 64 * 2**20


@dataclass(frozen=True, slots=True)
class ManifestReport:
    """Outcome of `check_manifest`.

    Attributes
    ----------
    manifest : str
        Path of the manifest.
    checked : tuple of str
        What held, each a sentence.
    failures : tuple of str
        What did not hold, each a sentence.
    unchecked : tuple of str
        What could not be checked, and why.
    backward_error : float or None
        Worked out again from input and factor files; None where the input could not be had.
    orthogonality : float or None
        Worked out again from the factor files; None where they could not be read.
    structure : bool or None
        Whether T as read has exactly the required form.
    """

    manifest: str
    checked: tuple[str, ...]
    failures: tuple[str, ...]
    unchecked: tuple[str, ...]
    backward_error: float | None
    orthogonality: float | None
    structure: bool | None

    @property
    def passed(self) -> bool:
        """Whether nothing failed; `unchecked` says what remains open."""
        return not self.failures

    @property
    def sentence(self) -> str:
        """The outcome in words."""
        if self.failures:
            return "Failed: " + " ".join(self.failures)
        if self.unchecked:
            return "Passed as far as it could be checked. " + " ".join(self.unchecked)
        return "Passed: the files are the ones the manifest describes, and the numbers hold."

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "manifest": self.manifest,
            "passed": self.passed,
            "sentence": self.sentence,
            "checked": list(self.checked),
            "failures": list(self.failures),
            "unchecked": list(self.unchecked),
            "backward_error": plain(self.backward_error),
            "orthogonality": plain(self.orthogonality),
            "limit": RATIO_LIMIT,
            "structure": self.structure,
        }


def check_manifest(path: str | Path, matrix: WorkingMatrix | None = None) -> ManifestReport:
    """Check saved factors against their manifest.

    Parameters
    ----------
    path : str or Path
        The manifest. Factor files are looked for beside it.
    matrix : WorkingMatrix, optional
        The input, where it did not come from a file or the file has moved.

    Returns
    -------
    ManifestReport

    Raises
    ------
    InputError
        `path` is not a manifest.

    Notes
    -----
    Files are hashed byte by byte, and the ratios are worked out from the arrays read back, not taken from the
    manifest. Nothing outside the manifest's folder is opened except the input it names.
    """
    path = Path(path)
    content = _read(path)
    checked: list[str] = []
    failures: list[str] = []
    unchecked: list[str] = []

    factors: dict[str, Array] = {}
    for entry in content["files"]:
        file = path.parent / entry["name"]
        if not file.is_file():
            failures.append(f"{file.name} is missing.")
            continue
        if file_sha256(file) != entry["sha256"]:
            failures.append(f"{file.name} has changed since it was written (its SHA-256 differs).")
        else:
            checked.append(f"{file.name} is unchanged.")
        for name in entry["holds"]:
            try:
                factors[name] = read_factor(file, name)
            except InputError as error:
                failures.append(f"{error}.")

    n, form, complete = content["input"]["n"], content["form"], content["complete"]
    t, z = factors.get("T"), factors.get("Z")
    backward_error = orthogonality = structure = None
    if t is not None and z is not None and (t.shape != (n, n) or z.shape != (n, n)):
        failures.append(f"T and Z are not {n} × {n} as the input is.")
    elif t is not None and z is not None:
        structure = is_exact(t, form)
        if complete and not structure:
            failures.append("T does not have exactly the required form.")
        elif complete:
            checked.append("T has exactly the required form.")
        else:
            unchecked.append("The factors are partial: T is Hessenberg in the windows that the manifest names.")
        with single_blas_thread():
            orthogonality = orthogonality_ratio(z)
        _judge("The departure of Z from orthogonal", orthogonality, checked, failures)
        a = _find_input(content["input"], matrix, checked, failures, unchecked)
        if a is not None:
            certificate: Certificate = certify(a, t, z, form)
            backward_error = certificate.backward_error
            _judge("The backward error", backward_error, checked, failures)
    return ManifestReport(
        str(path), tuple(checked), tuple(failures), tuple(unchecked), backward_error, orthogonality, structure
    )


def _judge(what: str, ratio: float, checked: list[str], failures: list[str]) -> None:
    if ratio < RATIO_LIMIT:
        checked.append(f"{what} is {number(ratio)} (limit {number(RATIO_LIMIT)}).")
    else:
        failures.append(f"{what} is {number(ratio)}, not under the limit {number(RATIO_LIMIT)}.")


def _find_input(
    described: dict[str, Any],
    matrix: WorkingMatrix | None,
    checked: list[str],
    failures: list[str],
    unchecked: list[str],
) -> Array | None:
    """The input matrix, when it is at hand and the very one of the manifest."""
    name = described["name"]
    if matrix is None:
        if described["file_sha256"] is None:
            unchecked.append(f"The backward error was not worked out again: {name} did not come from a file.")
            return None
        file = Path(described["source"])
        if not file.is_file():
            unchecked.append(f"The backward error was not worked out again: {file.name} is not there any more.")
            return None
        if file_sha256(file) != described["file_sha256"]:
            failures.append(f"The input {file.name} has changed since the factors were made (its SHA-256 differs).")
            return None
        try:
            matrix = load(file, key=described["key"])
        except InputError as error:
            unchecked.append(f"The backward error was not worked out again: {error}.")
            return None
    if matrix.sha256 != described["sha256"]:
        failures.append(f"The matrix given is not the one these factors were made of ({name}; its SHA-256 differs).")
        return None
    checked.append(f"The input {name} is unchanged.")
    return matrix.array


def _read(path: Path) -> dict[str, Any]:
    """Contents of a manifest, every field that is used checked for its type."""
    if not path.is_file():
        raise InputError(f"there is no manifest {str(path)!r}; give the .manifest.json file beside saved factors")
    if path.stat().st_size > _LONGEST_MANIFEST:
        raise InputError(f"{path.name} is too long to be a manifest; give the .manifest.json file beside saved factors")
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (UnicodeDecodeError, ValueError, RecursionError):
        raise InputError(f"{path.name} is not JSON; give the .manifest.json file beside saved factors") from None
    if not isinstance(content, dict) or content.get("kind") != MANIFEST_KIND:
        raise InputError(f"{path.name} is not a manifest of saved factors; give the .manifest.json file beside them")
    if content.get("version") != MANIFEST_VERSION:
        raise InputError(
            f"{path.name} has manifest version {content.get('version')!r} and only {MANIFEST_VERSION} is read here; "
            "use the version that wrote it"
        )
    if not _is_sound(content):
        raise InputError(f"{path.name} is damaged: a field is missing or of the wrong kind; save the factors again")
    return content


def _is_sound(content: dict[str, Any]) -> bool:
    described, files = content.get("input"), content.get("files")
    return (
        isinstance(described, dict)
        and all(isinstance(described.get(name), str) for name in ("name", "source", "sha256"))
        and all(isinstance(described.get(name), str | None) for name in ("file_sha256", "key"))
        and isinstance(described.get("n"), int)
        and content.get("form") in ("real", "complex")
        and isinstance(content.get("complete"), bool)
        and isinstance(files, list)
        and all(_is_file_entry(entry) for entry in files)
        and {name for entry in files for name in entry["holds"]} == {"T", "Z"}
    )


def _is_file_entry(entry: Any) -> bool:
    if not isinstance(entry, dict):
        return False
    name, holds = entry.get("name"), entry.get("holds")
    return (
        isinstance(name, str)
        and name == Path(name).name  # a plain name: nothing outside the manifest's folder
        and Path(name).suffix.lower() in FORMATS
        and isinstance(entry.get("sha256"), str)
        and isinstance(holds, list)
        and all(part in ("T", "Z") for part in holds)
    )

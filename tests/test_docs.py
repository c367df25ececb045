"""What the documents say can be done, can be done; what they name, exists; and public names explain themselves."""

from __future__ import annotations

import enum
import inspect
import re
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
import scipy.io
import scipy.linalg

import schurbench as sb
from schurbench.cli import main
from schurbench.factors import check_manifest

ROOT = Path(__file__).parent.parent
README, DEVELOPERS = ROOT / "README.md", ROOT / "DEVELOPERS.md"

#: Named in DEVELOPERS.md but written by a command that it names beside them, so that they need not be there.
WRITTEN_BY_A_COMMAND = {"tests/benchmarks/results.md"}


def blocks(document: Path, language: str) -> list[str]:
    """Fenced blocks of one language, in order."""
    return re.findall(rf"^```{language}\n(.*?)^```$", document.read_text(encoding="utf-8"), re.M | re.S)


def tracked() -> list[Path]:
    """Every text file of the project that exists: those git tracks, or outside a repository all but caches and builds."""
    listed = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode == 0 and "README.md" in (names := listed.stdout.split("\0")):
        files = [ROOT / name for name in names if name]
    else:
        kept = {".ci", ".editorconfig", ".gitattributes", ".gitignore", ".pre-commit-config.yaml"}
        skipped = {"__pycache__", "build", "dist", "artifacts"}
        files = []
        for path in ROOT.rglob("*"):
            parts = path.relative_to(ROOT).parts
            hidden = any(part.startswith(".") and part not in kept for part in parts)
            if not hidden and not skipped.intersection(parts):
                files.append(path)
    return [path for path in files if path.is_file() and b"\0" not in path.read_bytes()]


@pytest.fixture
def plant(tmp_path: Path, data: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty folder to work in, with the files that the examples name."""
    (tmp_path / "tests" / "data").mkdir(parents=True)
    shutil.copy(data / "west0067.mtx", tmp_path / "tests" / "data")
    scipy.io.savemat(tmp_path / "plant.mat", {"A": sb.load(data / "west0067.mtx").array})
    monkeypatch.chdir(tmp_path)
    return tmp_path


# --- the README -----------------------------------------------------------------------------------------------------


def test_python_of_the_readme_runs(plant: Path, capsys: pytest.CaptureFixture[str]) -> None:
    code = blocks(README, "python")
    assert code
    names: dict[str, object] = {}
    for block in code:
        exec(compile(block, "README.md", "exec"), names)
    assert "Passed" in capsys.readouterr().out
    # What it saved is a Schur decomposition of the matrix: held against LAPACK's eigenvalues through scipy.
    assert check_manifest(plant / "plant_schur.mat.manifest.json").passed
    a, saved = scipy.io.loadmat(plant / "plant.mat")["A"], scipy.io.loadmat(plant / "plant_schur.mat")
    np.testing.assert_allclose(saved["Z"] @ saved["T"] @ saved["Z"].T, a, atol=1e-12)
    ours, lapack = np.linalg.eigvals(saved["T"]), scipy.linalg.eigvals(a)
    np.testing.assert_allclose(np.abs(ours[:, None] - lapack[None, :]).min(axis=1), 0.0, atol=1e-12)
    stable = np.diagonal(saved["T"]) < 0.0  # the diagonal holds the real parts, left half-plane first
    assert list(stable) == sorted(stable, reverse=True)


def numbers_masked(text: str) -> str:
    """Lines compare by their words: counts and seconds differ from one processor to the next."""
    return " ".join(re.sub(r"\d[\d.]*(?:·10[⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+)?", "#", text).replace("−#", "#").split())


def sessions() -> Iterator[tuple[list[str], list[str]]]:
    """Every command of the README's console blocks with the output shown for it."""
    for block in blocks(README, "console"):
        for part in re.split(r"^\$ ", block, flags=re.M)[1:]:
            command, *shown = part.rstrip("\n").split("\n")
            yield command.split(), shown


def test_console_sessions_of_the_readme_show_what_is_printed(plant: Path, capsys: pytest.CaptureFixture[str]) -> None:
    told = list(sessions())
    assert told
    for (program, *arguments), shown in told:
        assert program == "schurbench"
        code = main(arguments)
        printed = [numbers_masked(line) for line in capsys.readouterr().out.split("\n")]
        assert code == (3 if any("stopped at the limit" in line for line in shown) else 0), arguments
        place = 0
        for line in shown:
            words = numbers_masked(line.removesuffix("…"))
            matching = [
                i
                for i, candidate in enumerate(printed)
                if i >= place and (candidate.startswith(words) if line.endswith("…") else candidate == words)
            ]
            assert matching, f"{' '.join(arguments)} does not print: {line}"
            place = matching[0] + (line.strip() != "…")


# --- DEVELOPERS.md --------------------------------------------------------------------------------------------------


def quoted(document: Path) -> set[str]:
    """Everything in code quotes outside fenced blocks."""
    text = re.sub(r"^```.*?^```$", "", document.read_text(encoding="utf-8"), flags=re.M | re.S)
    return set(re.findall(r"`([^`\n]+)`", text))


def test_paths_in_the_developers_document_exist() -> None:
    suffix = r"\.(?:py|md|toml|mtx|ipynb|yaml)"
    paths = {name for name in quoted(DEVELOPERS) if re.fullmatch(rf"[\w./-]+(?:/|{suffix})|\.ci/\w+", name)}
    assert len(paths) > 40
    missing = sorted(name for name in paths - WRITTEN_BY_A_COMMAND if not (ROOT / name).exists())
    assert not missing
    for name in WRITTEN_BY_A_COMMAND:
        assert f"`{name}`" in DEVELOPERS.read_text(encoding="utf-8")


def test_names_in_the_developers_document_exist() -> None:
    source = "\n".join(path.read_text(encoding="utf-8") for path in tracked() if path.suffix in (".py", ".toml"))
    words = set(re.findall(r"\w+", source))
    names = {re.sub(r"\(.*\)$|=$", "", name) for name in quoted(DEVELOPERS)}
    identifiers = {name for name in names if re.fullmatch(r"[A-Za-z_]\w*(?:\.\w+)*", name)}
    assert len(identifiers) > 80
    unknown = sorted(name for name in identifiers if not set(name.split(".")) <= words)
    assert not unknown


@pytest.mark.parametrize("document", [README, DEVELOPERS, ROOT / "CHANGELOG.md"], ids=lambda path: path.name)
def test_links_lead_somewhere(document: Path) -> None:
    text = document.read_text(encoding="utf-8")
    headings = {
        re.sub(r"[^\w -]", "", line.lstrip("# ").lower()).replace(" ", "-")
        for line in re.findall(r"^#+ .*$", text, re.M)
    }
    for target in re.findall(r"\]\(([^)\s]+)\)", text):
        assert target[1:] in headings if target.startswith("#") else (ROOT / target).exists(), target


# --- public names ---------------------------------------------------------------------------------------------------

PUBLIC = [name for name in sb.__all__ if name != "__version__"]


def documented(text: str, sections: tuple[str, ...]) -> set[str]:
    """Names that the numpydoc sections of a docstring describe."""
    found: set[str] = set()
    for section in sections:
        match = re.search(rf"^{section}\n-+\n(.*?)(?=^\S[^\n]*\n-+$|\Z)", text, re.M | re.S)
        for line in match.group(1).splitlines() if match else ():
            if line and not line[0].isspace():
                found.update(name.strip().lstrip("*") for name in line.split(" : ")[0].split(","))
    return found


@pytest.mark.parametrize("name", PUBLIC)
def test_public_names_explain_their_parameters(name: str) -> None:
    thing = getattr(sb, name)
    text = inspect.getdoc(thing) or ""
    assert text.splitlines()[0].rstrip().endswith((".", "?")), "the first line is a sentence"
    if inspect.isclass(thing) and issubclass(thing, (Exception, enum.Enum)):
        return
    signature = inspect.signature(thing)
    parameters = {parameter for parameter in signature.parameters if not parameter.startswith("_")}
    assert not parameters - documented(text, ("Parameters", "Attributes"))
    if inspect.isfunction(thing):
        assert re.search(r"^Returns\n-+$", text, re.M)


@pytest.mark.parametrize("name", [name for name in PUBLIC if inspect.isclass(getattr(sb, name))])
def test_methods_of_public_classes_say_what_they_do(name: str) -> None:
    for attribute, thing in vars(getattr(sb, name)).items():
        own = isinstance(thing, property) or inspect.isfunction(thing)
        if own and not attribute.startswith("_"):
            assert inspect.getdoc(thing), f"{name}.{attribute} has no docstring"


# --- all files ------------------------------------------------------------------------------------------------------

#: Put together here, so that this file does not contain them.
UNWANTED = {
    "a path of one machine": "/wo" + "rk/|/tmp/" + "dev|/ho" + "me/",
    "unfinished business": r"\bTO" + r"DO\b|\bFIX" + r"ME\b|\bXX" + r"X\b",
    "where a task came from": r"(?i)\blec" + r"tures?\b",
}


@pytest.mark.parametrize("what", UNWANTED)
def test_no_file_mentions(what: str) -> None:
    pattern = re.compile(UNWANTED[what])
    files = tracked()
    assert README in files
    found = [
        f"{path.relative_to(ROOT)}:{number}: {line.strip()[:80]}"
        for path in files
        for number, line in enumerate(path.read_text(encoding="utf-8", errors="replace").splitlines(), 1)
        if pattern.search(line)
    ]
    assert not found

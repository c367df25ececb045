"""The command line: exit codes, streams, files, and what each command prints."""

from __future__ import annotations

import contextlib
import io
import json
import os
import pty
import shlex
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import scipy.io
import scipy.optimize

import schurbench as sb
from schurbench.cli import console as console_module
from schurbench.cli import main
from schurbench.cli.options import COMMANDS, build_parser

README = Path(__file__).parent.parent / "README.md"


def strict(text: str) -> object:
    """JSON without the NaN and Infinity that Python's reader lets through."""

    def refuse(constant: str) -> object:
        raise AssertionError(f"{constant} is not JSON")

    return json.loads(text, parse_constant=refuse)


def middle(ball: str) -> float:
    """Midpoint of a ball as python-flint prints it: ``[1.25 +/- 3e-20]``, or ``[+/- 3e-20]`` around zero."""
    return float(ball.strip("[]").split("+/-")[0].strip() or 0.0)


def command(*arguments: object) -> list[str]:
    return [sys.executable, "-m", "schurbench", *map(str, arguments)]


@pytest.fixture(scope="module")
def saved_run(data: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("run") / "west.npz"
    assert main(["run", str(data / "west0067.mtx"), "-o", str(path)]) == 0
    return path


# --- what is documented -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_is_documented(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert f"schurbench {name}" in README.read_text(encoding="utf-8")
    assert main([name, "--help"]) == 0
    text = capsys.readouterr().out
    assert text.startswith(f"usage: schurbench {name} ")
    assert " ".join(COMMANDS[name].split())[1:] in " ".join(text.split())
    # A command that hands back data has it for machines too.
    assert ("--json" in text) == (name not in ("open", "demo"))
    # One that writes leaves alone what is there.
    assert ("--replace" in text) == (name in ("run", "explain", "export", "survey", "demo"))


def test_every_command_exists(capsys: pytest.CaptureFixture[str]) -> None:
    from schurbench.cli.commands import _COMMANDS

    assert set(_COMMANDS) == set(COMMANDS)
    assert main(["--help"]) == 0
    listing = capsys.readouterr().out
    assert all(f"\n    {name} " in listing for name in COMMANDS)


def test_help_names_the_settings_there_are(capsys: pytest.CaptureFixture[str]) -> None:
    from schurbench.policy import DEFLATION_TESTS, STRATEGIES
    from schurbench.prepare import BALANCE_CHOICES

    assert main(["run", "--help"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    for name in [*STRATEGIES, "given", "auto", *DEFLATION_TESTS, *BALANCE_CHOICES]:
        assert name in text


def test_run_goes_on_with_a_run_that_stopped(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    source = str(data / "west0067.mtx")
    first, second, whole = tmp_path / "first.npz", tmp_path / "second.npz", tmp_path / "whole.npz"
    assert main(["run", source, "-o", str(first), "--limit", "25"]) == 3
    assert main(["run", str(first), "-o", str(second), "--limit", "2010"]) == 0
    assert main(["run", source, "-o", str(whole)]) == 0
    went_on, at_once = sb.open_run(second), sb.open_run(whole)
    np.testing.assert_array_equal(went_on.state(len(went_on.steps)).H, at_once.state(len(at_once.steps)).H)
    capsys.readouterr()
    assert main(["run", str(first), "-o", str(tmp_path / "other.npz"), "--strategy", "zero"]) == 2
    assert "only --limit can" in capsys.readouterr().err
    assert main(["run", source]) == 2
    assert "-o RUN" in capsys.readouterr().err


def test_run_in_a_directory(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    source, place = str(data / "west0067.mtx"), tmp_path / "recorded"
    assert main(["run", source, "--store", str(place), "--limit", "25"]) == 3
    assert main(["explain", str(place)]) == 0
    assert main(["run", str(place), "--limit", "2010"]) == 0
    assert sb.open_run(place).converged
    assert main(["export", str(place), "-o", str(tmp_path / "factors.npz")]) == 0
    assert main(["run", source, "--store", str(place)]) == 2
    assert capsys.readouterr().err.strip().count("\n") == 0


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"schurbench {sb.__version__}\n"


def test_readme_gives_one_command_for_the_job_and_one_for_the_tests() -> None:
    # .ci/run carries out the second, read from between these very marks.
    text = README.read_text(encoding="utf-8")
    blocks = {
        mark: text.split(f"\n<!-- {mark} -->\n```bash\n")[1].split("\n```")[0].strip() for mark in ("job", "tests")
    }
    assert all("\n" not in block for block in blocks.values())
    assert blocks["job"].endswith(".venv/bin/schurbench open")
    assert blocks["tests"].endswith(".venv/bin/python -m pytest")


# --- bad input and usage: exit 2, one line ------------------------------------------------------------------------


def _npy(array: object, **options: object) -> Callable[[Path], None]:
    return lambda path: np.save(path, array, **options)  # type: ignore[arg-type]


def _text(text: str) -> Callable[[Path], object]:
    return lambda path: path.write_text(text)


def _truncated_npz(path: Path) -> None:
    buffer = io.BytesIO()
    np.savez(buffer, A=np.eye(40))
    path.write_bytes(buffer.getvalue()[:2000])


def _with_nan(path: Path) -> None:
    array = np.eye(5)
    array[3, 1] = np.nan
    np.save(path, array)


BAD_FILES: dict[str, tuple[str, Callable[[Path], object]]] = {
    "not square": ("a.npy", _npy(np.ones((2, 3)))),
    "order zero": ("a.npy", _npy(np.zeros((0, 0)))),
    "a NaN": ("a.npy", _with_nan),
    "an infinity": ("a.csv", _text("1,2\n3,inf\n")),
    "pickled": ("a.npy", _npy(np.array([[1, "x"], [None, 2]], dtype=object), allow_pickle=True)),
    "truncated": ("a.npz", _truncated_npz),
    "several arrays": ("a.npz", lambda path: np.savez(path, A=np.eye(2), B=np.eye(2))),
    "words": ("a.csv", _text("one,two\nthree,four\n")),
    "no bytes": ("a.mtx", _text("")),
    "too large": ("a.mtx", _text("%%MatrixMarket matrix coordinate real general\n9000000 9000000 1\n1 1 1.0\n")),
    "rubbish named .mat": ("a.mat", lambda path: path.write_bytes(bytes(range(256)) * 8)),
    "unknown kind": ("a.xyz", _text("1 2\n3 4\n")),
    "a folder": ("folder", lambda path: path.mkdir()),
    "nothing there": ("missing.npy", lambda path: None),
    "not exact in float64": ("a.npy", _npy(np.array([[2**53 + 1, 0], [0, 1]], dtype=np.int64))),
}


@pytest.mark.parametrize("kind", BAD_FILES)
@pytest.mark.parametrize("name", ["profile", "run", "explain", "compare", "export", "twin", "open"])
def test_bad_files_are_refused_in_one_line(
    kind: str, name: str, tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    file_name, write = BAD_FILES[kind]
    path = tmp_path / file_name
    write(path)
    before = sorted(tmp_path.iterdir())
    extra = {"run": ["-o", str(tmp_path / "out.npz")], "export": ["-o", str(tmp_path / "out.mat")]}.get(name, [])
    assert main([name, str(path), *extra]) == 2
    out, err = capfd.readouterr()
    lines = err.splitlines()
    if name == "twin" and len(lines) == 2:
        lines.pop(0)  # the line that says two processes are starting
    assert len(lines) == 1
    assert lines[0].startswith("schurbench: ")
    assert len(lines[0]) > 30
    assert out == ""
    assert sorted(tmp_path.iterdir()) == before


@pytest.mark.parametrize("kind", ["pickled", "truncated", "rubbish named .mat"])
def test_bad_files_in_a_process_of_their_own(kind: str, tmp_path: Path) -> None:
    file_name, write = BAD_FILES[kind]
    write(tmp_path / file_name)
    result = subprocess.run(command("profile", tmp_path / file_name), capture_output=True, text=True, timeout=60)
    assert result.returncode == 2
    assert len(result.stderr.splitlines()) == 1
    assert "Traceback" not in result.stderr
    assert result.stdout == ""


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["nonsense"],
        ["profile"],
        ["run", "MATRIX"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--strategy", "nonsense"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--form", "real", "--strategy", "wilkinson"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--balance", "nonsense"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--deflation", "nonsense"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--limit", "0"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--limit", "many"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--tol", "nan"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--exceptional", "-1"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--shifts", "1,x"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--strategy", "given"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--shifts", "1", "--strategy", "francis"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--key", "A"],
        ["run", "MATRIX", "-o", "OUT/x.npz", "--labels", "OUT/none.txt"],
        ["run", "MATRIX", "-o", "OUT/no/such/folder/x.npz"],
        ["run", "MATRIX", "-o", "OUT"],
        ["run", "MATRIX", "-o", "MATRIX", "--replace"],
        ["export", "MATRIX", "-o", "OUT/x.doc"],
        ["export", "MATRIX", "-o", "OUT/x.mat", "--reorder", "nonsense"],
        ["export", "RUN", "-o", "OUT/x.mat", "--strategy", "francis"],
        ["explain", "RUN", "--limit", "5"],
        ["compare", "MATRIX", "--with", "francis nonsense=1"],
        ["compare", "MATRIX", "--with", "francis limit=x"],
        ["compare", "MATRIX", "--with", "francis flip=perhaps"],
        ["compare", "MATRIX", "--with", " "],
        ["compare", "MATRIX", "--balance", "nonsense"],
        ["check", "MATRIX"],
        ["survey", "OUT/none*", "-o", "OUT/s.csv"],
        ["survey", "MATRIX", "-o", "OUT/s.doc"],
        ["demo", "-n", "3", "-o", "OUT/demo"],
        ["demo", "-o", "MATRIX"],
    ],
    ids=" ".join,
)
def test_bad_usage_is_one_line(
    arguments: list[str], data: Path, saved_run: Path, tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    replacements = {"MATRIX": data / "west0067.mtx", "RUN": saved_run, "OUT": tmp_path}
    capfd.readouterr()
    filled = []
    for argument in arguments:
        first, slash, rest = argument.partition("/")
        filled.append(f"{replacements.get(first, first)}{slash}{rest}")
    assert main(filled) == 2
    out, err = capfd.readouterr()
    assert len(err.splitlines()) == 1
    assert err.startswith("schurbench: ")
    assert out == ""
    assert list(tmp_path.iterdir()) == []


def test_unexpected_faults_are_one_line_and_show_their_stack_on_request(
    data: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def broken(*args: object, **kwargs: object) -> object:
        raise RuntimeError("two\nlines")

    monkeypatch.setattr(sb, "profile", broken, raising=False)
    assert main(["profile", str(data / "west0067.mtx")]) == 1
    assert len(capsys.readouterr().err.splitlines()) == 1
    monkeypatch.setenv("SCHURBENCH_DEBUG", "1")
    with pytest.raises(RuntimeError, match="two"):
        main(["profile", str(data / "west0067.mtx")])


# --- the commands -------------------------------------------------------------------------------------------------


def test_profile(data: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = str(data / "west0067.mtx")
    assert main(["profile", file]) == 0
    text = capsys.readouterr()
    assert "n = 67" in text.out
    assert text.err == ""
    assert main(["profile", file, "--json"]) == 0
    fields = strict(capsys.readouterr().out)
    a = scipy.io.mmread(file).toarray()
    assert isinstance(fields, dict)
    assert fields == json.loads(json.dumps(sb.profile(sb.load(file)).to_dict()))
    # numpy measures the same norms.
    assert fields["norm_one"] == pytest.approx(np.linalg.norm(a, 1), rel=1e-14)
    assert fields["norm_frobenius"] == pytest.approx(np.linalg.norm(a), rel=1e-14)


def test_run_writes_what_can_be_opened(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "run.npz"
    arguments = ["run", str(data / "west0067.mtx"), "-o", str(out), "--strategy", "wilkinson", "--balance", "both"]
    assert main([*arguments, "--json"]) == 0
    summary = strict(capsys.readouterr().out)
    run = sb.open_run(out)
    assert isinstance(summary, dict)
    assert summary["sweeps"] == run.sweeps
    assert (run.settings.strategy, run.settings.form, run.settings.balance) == ("wilkinson", "complex", "both")
    assert run.converged


def test_an_existing_file_is_kept(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = str(data / "west0067.mtx")
    for arguments, taken in [
        (["run", file, "-o", "NAME.npz"], "NAME.npz"),
        (["export", file, "-o", "NAME.mat"], "NAME.mat"),
        (["export", file, "-o", "NAME.mtx"], "NAME_Z.mtx"),
        (["export", file, "-o", "NAME.npz"], "NAME.npz.manifest.json"),
        (["explain", file, "--html", "NAME.html"], "NAME.html"),
        (["survey", file, "-o", "NAME.csv"], "NAME.csv"),
    ]:
        place = tmp_path / f"{arguments[0]}{taken}"
        place.mkdir()
        filled = [str(place / argument) if argument.startswith("NAME") else argument for argument in arguments]
        (place / taken).write_text("precious")
        assert main(filled) == 2
        captured = capsys.readouterr()
        assert "--replace" in captured.err
        assert (place / taken).read_text() == "precious"
        assert [path.name for path in place.iterdir()] == [taken]
        assert main([*filled, "--replace"]) == 0
        assert (place / taken).read_bytes() != b"precious"
        capsys.readouterr()


def test_explain_a_file_and_a_run(
    data: Path, saved_run: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    capsys.readouterr()
    for source in (data / "west0067.mtx", saved_run):
        assert main(["explain", str(source), "--json"]) == 0
        told = strict(capsys.readouterr().out)
        assert isinstance(told, dict)
        assert set(told) >= {"findings", "forecast"}
        assert told["findings"]
        for finding in told["findings"]:
            assert set(finding) >= {"cause", "statement", "evidence", "rows", "steps", "remedy"}
    page = tmp_path / "why.html"
    assert main(["explain", str(saved_run), "--html", str(page)]) == 0
    out = capsys.readouterr().out
    assert told["findings"][0]["statement"] in out
    text = page.read_text(encoding="utf-8")
    assert text.lower().startswith("<!doctype html>")
    assert "<script src=" not in text
    assert "http://" not in text.replace("http://www.w3.org/", "")


def test_explaining_a_failed_run_is_normal_work(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    # Unshifted steps only permute a cyclic permutation (closed form: its eigenvalues are the roots of unity).
    file, out = tmp_path / "cycle.npy", tmp_path / "cycle.npz"
    np.save(file, np.roll(np.eye(12), 1, axis=0))
    assert main(["run", str(file), "-o", str(out), "--strategy", "zero", "--limit", "40"]) == 3
    assert sb.open_run(out).sweeps == 40
    capsys.readouterr()
    assert main(["explain", str(out), "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert told["findings"][0]["cause"] == "equal-moduli"


def test_the_commands_that_remedies_print_are_commands(
    data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "cycle.npy"
    np.save(file, np.roll(np.eye(12), 1, axis=0))
    printed = []
    for arguments in (
        ["--strategy", "zero", "--limit", "40", "--deflation", "norm", "--tol", "1e-14", "--flip"],
        ["--shifts=0.1,-0.1", "--limit", "4", "--balance", "none"],
        ["--strategy", "francis", "--exceptional", "0", "--limit", "50"],
    ):
        assert main(["explain", str(file), *arguments]) == 0
        lines = [line.strip() for line in capsys.readouterr().out.splitlines()]
        printed += [line for line in lines if line.startswith("schurbench ")]
    assert len(printed) >= 3
    for line in printed:
        words = shlex.split(line)
        assert build_parser().parse_args(words[1:]).file == file


def test_compare(data: Path, capsys: pytest.CaptureFixture[str]) -> None:
    arguments = ["compare", str(data / "west0067.mtx"), "--strategy", "francis,wilkinson"]
    assert main([*arguments, "--with", "francis balance=both flip=yes", "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert set(told) >= {"entries", "preferred"}
    assert [entry["settings"]["strategy"] for entry in told["entries"]] == ["francis", "wilkinson", "francis"]
    assert told["entries"][2]["settings"]["balance"] == "both"
    assert told["entries"][2]["settings"]["flip"] is True
    assert told["preferred"] in [entry["label"] for entry in told["entries"]]
    assert main([*arguments, "--with", "wilkinson form=real"]) == 0  # one entry that cannot be run stops no other
    text = capsys.readouterr().out
    assert "failed: wilkinson shifts of a real matrix" in text
    assert "is preferred" in text


def test_export_holds_against_certified_eigenvalues(
    data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    # Eigenvalues computed with python-flint from the exact characteristic polynomial; see tests/data/README.md.
    certified = json.loads((data / "certified" / "gyro_wiresaw50.json").read_text())
    exact = [complex(middle(re), middle(im)) for re, im, multiplicity in certified for _ in range(multiplicity)]
    out = tmp_path / "gyro.mat"
    assert main(["export", str(data / "gyro_wiresaw50.npz"), "-o", str(out), "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert told["certificate"]["passed"] is True
    assert told["files"] == [str(out), f"{out}.manifest.json"]
    t = scipy.io.loadmat(out)["T"]
    found = np.linalg.eigvals(t)
    distance = np.abs(found[:, None] - np.array(exact)[None, :])
    pairs = scipy.optimize.linear_sum_assignment(distance)
    bound = 50 * max(told["certificate"]["rounding_movement"])
    assert distance[pairs].max() < bound


def test_export_reorders(data: Path, tmp_path: Path) -> None:
    out = tmp_path / "west.npz"
    assert main(["export", str(data / "west0067.mtx"), "-o", str(out), "--reorder", "left-half-plane"]) == 0
    with np.load(out) as archive:
        values = np.linalg.eigvals(archive["T"])
        t = archive["T"]
    stable = int((values.real < 0).sum())
    assert 0 < stable < 67
    assert np.all(np.linalg.eigvals(t[:stable, :stable]).real < 0)


def test_no_convergence_is_exit_3_with_the_partial_result(
    data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = str(data / "west0067.mtx")
    assert main(["run", file, "-o", str(tmp_path / "r.npz"), "--limit", "3"]) == 3
    assert sb.open_run(tmp_path / "r.npz").sweeps == 3
    for source in (tmp_path / "r.npz", None):
        out = tmp_path / ("a.npz" if source else "b.npz")
        extra = [str(source)] if source else [file, "--limit", "3"]
        assert main(["export", *extra, "-o", str(out)]) == 3
        with np.load(out) as factors:
            a, t, z = scipy.io.mmread(file).toarray(), factors["T"], factors["Z"]
            assert np.linalg.norm(a - z @ t @ z.T, 1) / (np.linalg.norm(a, 1) * 67 * 2**-52) < 20
    assert capsys.readouterr().err == ""


def test_check(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "f.npz"
    assert main(["export", str(data / "west0067.mtx"), "-o", str(out)]) == 0
    manifest = f"{out}.manifest.json"
    assert main(["check", manifest]) == 0
    assert main(["check", manifest, "--input", str(data / "west0067.mtx")]) == 0
    capsys.readouterr()
    assert main(["check", manifest, "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert told["passed"] is True
    with np.load(out) as archive:
        t, z = archive["T"].copy(), archive["Z"]
    t[0, 1] = np.nextafter(t[0, 1], 1e9)
    np.savez(out, T=t, Z=z)
    assert main(["check", manifest]) == 2
    captured = capsys.readouterr()
    assert "has changed" in captured.err
    assert len(captured.err.splitlines()) == 1


@pytest.mark.slow
def test_twin(data: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["twin", str(data / "west0067.mtx"), "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert len(told["jobs"]) == 2


def test_survey(data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "bad.npy").write_bytes(b"nothing")
    np.save(tmp_path / "clement.npy", np.diag(np.arange(1.0, 9.0), 1) + np.diag(np.arange(8.0, 0.0, -1.0), -1))
    out = tmp_path / "table.json"
    assert main(["survey", str(tmp_path), "-o", str(out)]) == 0
    told = strict(out.read_text(encoding="utf-8"))
    assert isinstance(told, dict)
    rows = {row["name"]: row for row in told["rows"]}
    assert rows["clement"]["converged"] is True
    assert rows["bad.npy"]["error"]
    text = capsys.readouterr().out
    assert "bad.npy failed" in text
    assert "clement" in text


def test_warm(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["warm", "--json"]) == 0
    told = strict(capsys.readouterr().out)
    assert isinstance(told, dict)
    assert set(told) == {"seconds", "cache"}
    assert all(seconds >= 0 for seconds in told["seconds"].values())


def test_open_hands_the_file_on(
    data: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from schurbench.panels import serve

    calls: list[tuple[object, ...]] = []

    def served(file: Path | None, *, key: str | None, labels: Path | None, page: bool, browser: bool) -> int:
        calls.append((file, key, labels, page, browser))
        return 0

    monkeypatch.setattr(serve, "open_workbench", served)
    file = data / "west0067.mtx"
    assert main(["open"]) == 0
    assert main(["open", str(file), "--page", "--no-browser"]) == 0
    assert main(["open", str(file), "--key", "A", "--labels", "states.txt"]) == 0
    assert calls == [
        (None, None, None, False, True),
        (file, None, None, True, False),
        (file, "A", Path("states.txt"), False, True),
    ]


@pytest.mark.parametrize("page", [False, True])
def test_open_says_what_is_missing(
    page: bool, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from schurbench.panels import serve

    monkeypatch.setattr(serve, "find_spec", lambda name: None)
    assert main(["open", "--page"] if page else ["open"]) == 2
    err = capsys.readouterr().err
    assert len(err.splitlines()) == 1
    assert "pip install" in err


def test_demo_does_the_whole_job(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = tmp_path / "made here"
    assert main(["demo", "-n", "20", "-o", str(folder)]) == 0
    out, err = capsys.readouterr()
    for heading in ("1. The matrix", "2. The iteration", "3. Why", "4. Other strategies", "5. Factors", "Next"):
        assert heading in out
    assert "Passed: the backward error" in out
    assert err == ""
    (manifest,) = folder.glob("*.manifest.json")
    assert main(["check", str(manifest)]) == 0
    (run,) = folder.glob("*_run.npz")
    assert sb.open_run(run).matrix.labels is not None
    capsys.readouterr()
    assert main(["demo", "-n", "20", "-o", str(folder)]) == 2
    assert "--replace" in capsys.readouterr().err
    assert main(["demo", "-n", "20", "-o", str(folder), "--replace"]) == 0


# --- streams and signals ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["run", "export"])
def test_an_interrupted_run_is_written(name: str, tmp_path: Path) -> None:
    # Unshifted steps only permute a cyclic permutation: without an end of its own.
    file, out = tmp_path / "cycle.npy", tmp_path / "out.npz"
    np.save(file, np.roll(np.eye(60), 1, axis=0))
    terminal, stderr = pty.openpty()
    process = subprocess.Popen(
        command(name, file, "-o", out, "--strategy", "zero", "--limit", "100000000"),
        stderr=stderr,
        stdout=subprocess.DEVNULL,
    )
    os.close(stderr)
    seen = b""
    while b" sweeps, " not in seen:  # the progress line shows that the iteration is on its way
        seen += os.read(terminal, 4096)
    process.send_signal(signal.SIGINT)
    with contextlib.suppress(OSError):  # how a terminal ends when the process at its other end does
        while piece := os.read(terminal, 4096):
            seen += piece
    os.close(terminal)
    assert process.wait(timeout=60) == 130
    assert b"Traceback" not in seen
    if name == "run":
        run = sb.open_run(out)
        assert run.stop.reason == "cancelled"
        assert run.sweeps > 0
    else:
        with np.load(out) as factors:
            t, z = factors["T"], factors["Z"]
        assert np.allclose(z @ t @ z.T, np.load(file), atol=1e-12)


def test_a_reader_that_goes_away_is_no_fault(data: Path) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    try:
        result = subprocess.run(
            command("profile", data / "west0067.mtx", "--json"),
            stdout=writing,
            stderr=subprocess.PIPE,
            text=True,
            timeout=60,
        )
    finally:
        os.close(writing)
    assert result.returncode == 141
    assert result.stderr == ""


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_progress_in_a_terminal_is_one_line_that_goes_away(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(console_module, "SECONDS_BETWEEN_REWRITES", 0.0)
    out, err = io.StringIO(), Terminal()
    console = console_module.Console(out, err)
    show = console.progress(50)
    for phase, sweeps in (("iterate", 3), ("iterate", 12), ("done", 20)):
        show(sb.Progress(phase, sweeps, (0, 40), 10, 0.4, 1.25, 2.5))
    console.say("result")
    console.close()
    written = err.getvalue()
    assert "12 sweeps, 10 of 50 rows final" in written
    assert "\n" not in written
    # Whatever was last on the line is overwritten by blanks before the data are printed.
    assert written.split("\r")[-2].strip() == ""
    assert out.getvalue() == "result\n"


def test_progress_in_a_file_is_an_occasional_line(monkeypatch: pytest.MonkeyPatch) -> None:
    err = io.StringIO()
    console = console_module.Console(io.StringIO(), err)
    console.status("too soon")
    monkeypatch.setattr(console_module, "SECONDS_BETWEEN_LINES", 0.0)
    console.status("matrix 3 of 9")
    assert err.getvalue() == "matrix 3 of 9\n"


def test_output_survives_a_terminal_without_greek(data: Path) -> None:
    environment = {**os.environ, "PYTHONIOENCODING": "ascii"}
    result = subprocess.run(
        command("profile", data / "west0067.mtx"), capture_output=True, text=True, timeout=60, env=environment
    )
    assert result.returncode == 0
    assert result.stderr == ""


def test_parser_is_complete() -> None:
    arguments = build_parser().parse_args(["run", "a", "-o", "b", "--shifts=-1,2+3i,2-3j", "--flip"])
    assert arguments.shifts == [-1, 2 + 3j, 2 - 3j]
    assert arguments.flip is True


def test_advice_is_in_the_words_of_the_command_line(
    data: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file, kept = str(data / "west0067.mtx"), str(tmp_path / "r.npz")
    assert main(["run", file, "-o", kept, "--strategy", "given"]) == 2
    assert "add for example --shifts=" in capsys.readouterr().err
    assert main(["run", file, "-o", kept, "--no-vectors"]) == 0
    capsys.readouterr()
    assert main(["export", kept, "-o", str(tmp_path / "f.mat")]) == 2
    assert "was run with --no-vectors" in capsys.readouterr().err
    assert not (tmp_path / "f.mat").exists()

"""Files read back bit for bit by the libraries that own the formats, and manifests that notice every change."""

from __future__ import annotations

import hashlib
import json
import shutil
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.io

import schurbench as sb
from schurbench.factors import check_manifest, writers
from schurbench.measures import RATIO_LIMIT

SUFFIXES = [".mat", ".npz", ".h5", ".mtx"]


def read_with_owner(path: Path) -> dict[str, np.ndarray]:
    """T and Z through scipy, NumPy or h5py directly."""
    if path.suffix == ".mat":
        content = scipy.io.loadmat(path)
        assert sorted(name for name in content if not name.startswith("__")) == ["T", "Z"]
        return {"T": content["T"], "Z": content["Z"]}
    if path.suffix == ".npz":
        with np.load(path, allow_pickle=False) as archive:
            assert sorted(archive.files) == ["T", "Z"]
            return {name: archive[name] for name in archive.files}
    if path.suffix == ".h5":
        with h5py.File(path) as file:
            assert sorted(file) == ["T", "Z"]
            return {name: file[name][()] for name in file}
    return {name: scipy.io.mmread(path.with_name(f"{path.stem}_{name}.mtx")) for name in ("T", "Z")}


def awkward(form: str) -> sb.Factors:
    """Factors whose arrays hold what decimal formats lose first: subnormals, the ends of the range, last bits."""
    factors = sb.iterate(np.random.default_rng(4).standard_normal((6, 6)), form=form).factors()
    t, z = factors.T.copy(), factors.Z.copy()
    t[0, 2:] = [5e-324, -1.7976931348623157e308, 0.1 + 0.2, np.nextafter(1.0, 2.0)]
    z[1, :4] = [-1e-310, 2.2250738585072014e-308, -2.2250738585072009e-308, 1 / 3]
    if form == "complex":
        t[0, 2:] += 1j * np.array([1e-300, -0.0, np.pi, -5e-324])
    return sb.Factors(t, z, form, factors.matrix, factors.settings, factors.environment)


@pytest.fixture
def factors(data: Path) -> sb.Factors:
    return sb.iterate(data / "west0067.mtx").factors()


@pytest.mark.parametrize("form", ["real", "complex"])
@pytest.mark.parametrize("suffix", SUFFIXES)
def test_round_trip_is_bit_exact(tmp_path: Path, suffix: str, form: str) -> None:
    factors = awkward(form)
    written = factors.save(tmp_path / f"plant{suffix}")
    again = read_with_owner(tmp_path / f"plant{suffix}")
    for name in ("T", "Z"):
        expected = getattr(factors, name)
        assert again[name].dtype == expected.dtype
        assert again[name].shape == expected.shape
        assert np.ascontiguousarray(again[name]).tobytes() == expected.tobytes()
        ours = writers.read_factor(next(path for path in written if path.suffix == suffix and _holds(path, name)), name)
        assert np.ascontiguousarray(ours).tobytes() == expected.tobytes()


def _holds(path: Path, name: str) -> bool:
    return path.suffix != ".mtx" or path.stem.endswith(f"_{name}")


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_names_of_what_is_written(tmp_path: Path, factors: sb.Factors, suffix: str) -> None:
    written = factors.save(tmp_path / f"plant_schur{suffix}")
    data_files = ["plant_schur_T.mtx", "plant_schur_Z.mtx"] if suffix == ".mtx" else [f"plant_schur{suffix}"]
    assert [path.name for path in written] == [*data_files, f"plant_schur{suffix}.manifest.json"]
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(path.name for path in written)
    assert written == writers.paths_of(tmp_path / f"plant_schur{suffix}")


def test_manifest_says_where_the_factors_come_from(tmp_path: Path, factors: sb.Factors, data: Path) -> None:
    *files, manifest = factors.save(str(tmp_path / "w.mtx"))
    content = json.loads(manifest.read_text(encoding="utf-8"))
    assert content["input"]["sha256"] == factors.matrix.sha256
    assert content["input"]["file_sha256"] == hashlib.sha256((data / "west0067.mtx").read_bytes()).hexdigest()
    assert content["input"]["n"] == 67
    assert content["input"]["dtype"] == "float64"
    assert content["settings"]["strategy"] == "francis"
    assert {"numpy", "scipy", "numba", "schurbench", "python"} <= set(content["environment"]["versions"])
    assert "threads" in content["environment"]
    assert content["certificate"]["passed"] is True
    assert content["certificate"]["limit"] == RATIO_LIMIT
    assert content["complete"] is True
    assert content["unfinished"] == []
    assert content["eigenvalue_count"] == 67
    values = np.array([complex(*pair) for pair in content["eigenvalues"]])
    assert values.tobytes() == factors.eigenvalues.tobytes()
    for entry, file in zip(content["files"], files, strict=True):
        assert entry["name"] == file.name
        assert entry["bytes"] == file.stat().st_size
        assert entry["sha256"] == hashlib.sha256(file.read_bytes()).hexdigest()


def test_manifest_of_partial_and_scaled_factors(tmp_path: Path, data: Path) -> None:
    partial = sb.iterate(data / "west0067.mtx", limit=60).factors()
    manifest = partial.save(tmp_path / "partial.npz")[-1]
    content = json.loads(manifest.read_text(encoding="utf-8"))
    assert content["complete"] is False
    assert [tuple(window) for window in content["unfinished"]] == list(partial.unfinished)
    assert content["eigenvalue_count"] == int(np.isfinite(partial.eigenvalues).sum())
    assert [None, None] in content["eigenvalues"]
    report = check_manifest(manifest)
    assert report.passed
    assert "partial" in report.sentence

    scaled = sb.iterate(data / "kinetics_gri30.npz", balance="both").factors()
    manifest = scaled.save(tmp_path / "scaled.npz")[-1]
    content = json.loads(manifest.read_text(encoding="utf-8"))
    assert scaled.scaled is not None
    assert content["scaled"]["D"] == scaled.scaled.D.tolist()
    assert len(content["scaled"]["eigenvalues"]) == 54
    assert check_manifest(manifest).passed


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_check_passes_what_was_saved(tmp_path: Path, factors: sb.Factors, suffix: str) -> None:
    manifest = factors.reorder("left-half-plane").save(tmp_path / f"plant{suffix}")[-1]
    report = check_manifest(manifest)
    assert report.passed
    assert report.unchecked == ()
    assert report.structure is True
    assert report.backward_error is not None
    assert report.backward_error < RATIO_LIMIT
    assert report.orthogonality is not None
    assert "Passed" in report.sentence
    json.dumps(report.to_dict(), allow_nan=False)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_check_notices_one_flipped_bit(tmp_path: Path, factors: sb.Factors, suffix: str) -> None:
    file, *_, manifest = factors.save(tmp_path / f"plant{suffix}")
    content = bytearray(file.read_bytes())
    content[len(content) // 2] ^= 1
    file.write_bytes(content)
    report = check_manifest(manifest)
    assert not report.passed
    assert any("has changed since it was written" in failure for failure in report.failures)
    assert report.sentence.startswith("Failed")


def test_check_works_the_numbers_out_again(tmp_path: Path, factors: sb.Factors) -> None:
    # A manifest that vouches for wrong factors: hashes fit, the certificate in it says passed.
    file, manifest = factors.save(tmp_path / "plant.npz")
    t = factors.T.copy()
    t[0, 5] += 1e-6 * np.linalg.norm(t)
    np.savez(file, T=t, Z=factors.Z)
    content = json.loads(manifest.read_text(encoding="utf-8"))
    content["files"][0]["sha256"] = hashlib.sha256(file.read_bytes()).hexdigest()
    manifest.write_text(json.dumps(content), encoding="utf-8")
    report = check_manifest(manifest)
    assert len(report.failures) == 1
    assert report.failures[0].startswith("The backward error is")

    t = factors.T.copy()
    t[9, 2] = 1e-300
    np.savez(file, T=t, Z=2 * factors.Z)
    content["files"][0]["sha256"] = hashlib.sha256(file.read_bytes()).hexdigest()
    manifest.write_text(json.dumps(content), encoding="utf-8")
    failures = " ".join(check_manifest(manifest).failures)
    assert "exactly the required form" in failures
    assert "orthogonal" in failures


def test_check_says_what_it_could_not_check(tmp_path: Path, data: Path) -> None:
    source = tmp_path / "plant.npz"
    shutil.copy(data / "kinetics_gri30.npz", source)
    factors = sb.iterate(source).factors()
    manifest = factors.save(tmp_path / "out.mat")[-1]
    assert check_manifest(manifest).unchecked == ()

    with source.open("ab") as stream:
        stream.write(b"more")
    assert any("plant.npz has changed" in failure for failure in check_manifest(manifest).failures)

    source.unlink()
    report = check_manifest(manifest)
    assert report.passed
    assert report.backward_error is None
    assert "is not there any more" in report.unchecked[0]
    assert check_manifest(manifest, matrix=factors.matrix).backward_error is not None

    other = sb.load(np.eye(54))
    assert any(
        "not the one these factors were made of" in failure for failure in check_manifest(manifest, other).failures
    )

    (tmp_path / "out.mat").unlink()
    assert any("out.mat is missing" in failure for failure in check_manifest(manifest).failures)


def test_check_of_a_matrix_from_memory(tmp_path: Path) -> None:
    factors = sb.iterate(np.diag([1.0, 2.0])).factors()
    report = check_manifest(factors.save(tmp_path / "x.h5")[-1])
    assert report.passed
    assert "did not come from a file" in report.unchecked[0]


def test_input_among_several_arrays_is_found_again(tmp_path: Path) -> None:
    a = np.random.default_rng(0).standard_normal((5, 5))
    np.savez(tmp_path / "two.npz", first=np.eye(5), second=a)
    factors = sb.iterate(sb.load(tmp_path / "two.npz", key="second")).factors()
    assert check_manifest(factors.save(tmp_path / "x.mat")[-1]).unchecked == ()


def test_existing_files_are_left_alone(tmp_path: Path, factors: sb.Factors) -> None:
    (tmp_path / "plant_Z.mtx").write_text("mine", encoding="utf-8")
    with pytest.raises(sb.InputError, match=r"plant_Z\.mtx exists already"):
        factors.save(tmp_path / "plant.mtx")
    assert [path.name for path in tmp_path.iterdir()] == ["plant_Z.mtx"]
    assert (tmp_path / "plant_Z.mtx").read_text(encoding="utf-8") == "mine"
    written = factors.save(tmp_path / "plant.mtx", replace=True)
    assert check_manifest(written[-1]).passed


def test_a_failed_save_leaves_what_was_there(
    tmp_path: Path, factors: sb.Factors, monkeypatch: pytest.MonkeyPatch
) -> None:
    factors.save(tmp_path / "plant.npz")
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}

    def full(*_: Any, **__: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(writers.np, "savez", full)
    with pytest.raises(OSError, match="No space left"):
        factors.save(tmp_path / "plant.npz", replace=True)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_a_name_taken_in_the_meantime_is_not_overwritten(
    tmp_path: Path, factors: sb.Factors, monkeypatch: pytest.MonkeyPatch
) -> None:
    honest = writers.manifest_of

    def slow(*arguments: Any) -> dict[str, Any]:
        (tmp_path / "plant_Z.mtx").write_text("theirs", encoding="utf-8")
        return honest(*arguments)

    monkeypatch.setattr(writers, "manifest_of", slow)
    with pytest.raises(sb.InputError, match=r"plant_Z\.mtx appeared while saving"):
        factors.save(tmp_path / "plant.mtx")
    assert [path.name for path in tmp_path.iterdir()] == ["plant_Z.mtx"]
    assert (tmp_path / "plant_Z.mtx").read_text(encoding="utf-8") == "theirs"


def test_unknown_suffix_and_missing_folder(tmp_path: Path, factors: sb.Factors) -> None:
    with pytest.raises(sb.InputError, match=r"\.mat, \.npz, \.h5, \.mtx"):
        factors.save(tmp_path / "plant.xlsx")
    with pytest.raises(sb.InputError, match="no folder"):
        factors.save(tmp_path / "nowhere" / "plant.mat")


def test_what_a_mat_variable_cannot_hold_is_refused(
    tmp_path: Path, factors: sb.Factors, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(writers, "_LARGEST_MAT_VARIABLE", 1000)
    with pytest.raises(sb.InputError, match=r"save as \.h5 or \.npz"):
        factors.save(tmp_path / "plant.mat")
    assert list(tmp_path.iterdir()) == []


def _damage(content: dict[str, Any], *keys: Any, value: Any) -> dict[str, Any]:
    place: Any = content
    for key in keys[:-1]:
        place = place[key]
    place[keys[-1]] = value
    return content


@pytest.mark.parametrize(
    ("keys", "value", "message"),
    [
        (("kind",), "something else", "not a manifest"),
        (("version",), 99, "manifest version 99"),
        (("files", 0, "name"), "../plant.npz", "damaged"),
        (("files", 0, "name"), "plant.pickle", "damaged"),
        (("files", 0, "holds"), ["T"], "damaged"),
        (("files",), None, "damaged"),
        (("input", "n"), "67", "damaged"),
        (("form",), "both", "damaged"),
    ],
)
def test_damaged_manifests_are_refused(
    tmp_path: Path, factors: sb.Factors, keys: tuple[Any, ...], value: Any, message: str
) -> None:
    manifest = factors.save(tmp_path / "plant.npz")[-1]
    content = _damage(json.loads(manifest.read_text(encoding="utf-8")), *keys, value=value)
    manifest.write_text(json.dumps(content), encoding="utf-8")
    with pytest.raises(sb.InputError, match=message):
        check_manifest(manifest)


def test_what_is_no_manifest_is_refused(tmp_path: Path) -> None:
    with pytest.raises(sb.InputError, match="there is no manifest"):
        check_manifest(tmp_path / "none.json")
    (tmp_path / "x.json").write_bytes(b"\xff\xfe not json")
    with pytest.raises(sb.InputError, match="is not JSON"):
        check_manifest(tmp_path / "x.json")


def test_hdf5_links_to_other_files_are_not_followed(tmp_path: Path, factors: sb.Factors) -> None:
    file, manifest = factors.save(tmp_path / "plant.h5")
    file.rename(tmp_path / "elsewhere.h5")
    with h5py.File(file, "w") as stream:
        stream["T"] = h5py.ExternalLink("elsewhere.h5", "T")
        stream["Z"] = h5py.SoftLink("/T")
    failures = " ".join(check_manifest(manifest).failures)
    assert "holds no array T of its own" in failures
    assert "holds no array Z of its own" in failures

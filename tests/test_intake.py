"""Intake against NumPy, scipy, h5py and pandas as writers and readers, and against files made to be refused."""

from __future__ import annotations

import gzip
import hashlib
import io
import json
import pickle
import struct
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.io
import scipy.sparse
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

import schurbench as sb
from schurbench.intake import limits

# Property tests below write one file per example into the same folder, which is what they mean to do.
same_folder = settings(max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])

finite = st.floats(allow_nan=False, allow_infinity=False)
finite_complex = st.complex_numbers(allow_nan=False, allow_infinity=False)
orders = st.integers(1, 6).map(lambda n: (n, n))
real_matrices = hnp.arrays(np.float64, orders, elements=finite)
complex_matrices = hnp.arrays(np.complex128, orders, elements=finite_complex)
matrices = real_matrices | complex_matrices


def same_bits(array: np.ndarray, expected: np.ndarray) -> bool:
    """Equal type, shape and bits, so that −0.0 and subnormals count."""
    return array.dtype == expected.dtype and array.shape == expected.shape and array.tobytes() == expected.tobytes()


def refused(source: Any, *parts: str, **keywords: Any) -> str:
    """Load, expect one clear line, and return it."""
    with pytest.raises(sb.InputError) as caught:
        sb.load(source, **keywords)
    message = str(caught.value)
    assert message
    assert message.isprintable(), "one line of printable text"
    assert len(message) < 700
    for part in parts:
        assert part in message, message
    return message


# --- round trips: the writer is the reference ---------------------------------------------------------------


@same_folder
@given(a=matrices)
def test_npy_comes_back_bit_for_bit(a: np.ndarray, tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", a)
    m = sb.load(tmp_path / "a.npy")
    assert same_bits(m.array, a)
    assert m.notes == () or (len(m.notes) == 1 and "imaginary" in m.notes[0])


@same_folder
@given(a=matrices, order=st.sampled_from("CF"), swapped=st.booleans())
def test_npy_layout_and_byte_order_do_not_matter(a: np.ndarray, order: Any, swapped: bool, tmp_path: Path) -> None:
    written = a.astype(a.dtype.newbyteorder(), order=order) if swapped else a.astype(a.dtype, order=order)
    np.save(tmp_path / "a.npy", written)
    m = sb.load(tmp_path / "a.npy")
    assert same_bits(m.array, a)
    assert m.array.flags.c_contiguous
    assert m.array.dtype.isnative
    assert m.sha256 == sb.load(a).sha256


@same_folder
@given(a=matrices, compressed=st.booleans())
def test_npz_comes_back_bit_for_bit(a: np.ndarray, compressed: bool, tmp_path: Path) -> None:
    save: Callable[..., None] = np.savez_compressed if compressed else np.savez
    save(tmp_path / "a.npz", plant=a)
    m = sb.load(tmp_path / "a.npz")
    assert same_bits(m.array, a)
    assert m.key == "plant"


@same_folder
@given(a=matrices)
def test_matlab_5_comes_back_as_scipy_wrote_it(a: np.ndarray, tmp_path: Path) -> None:
    scipy.io.savemat(tmp_path / "a.mat", {"A": a, "note": "text is passed over", "B": np.zeros((a.shape[0], 9))})
    m = sb.load(tmp_path / "a.mat")
    assert same_bits(m.array, a)
    assert m.key == "A"
    assert "A (" in m.notes[0]


@same_folder
@given(a=matrices)
def test_matrix_market_array_keeps_17_digits(a: np.ndarray, tmp_path: Path) -> None:
    # 17 significant digits determine a float64 (IEEE 754, section 5.12.2; common practice).
    scipy.io.mmwrite(tmp_path / "a.mtx", a, precision=17, symmetry="general")
    np.testing.assert_array_equal(sb.load(tmp_path / "a.mtx").array, a)


@same_folder
@given(a=matrices, zipped=st.booleans())
def test_matrix_market_coordinates_keep_17_digits(a: np.ndarray, zipped: bool, tmp_path: Path) -> None:
    buffer = io.BytesIO()
    scipy.io.mmwrite(buffer, scipy.sparse.coo_array(a), precision=17, symmetry="general")
    path = tmp_path / ("a.mtx.gz" if zipped else "a.mtx")
    path.write_bytes(gzip.compress(buffer.getvalue()) if zipped else buffer.getvalue())
    m = sb.load(path)
    np.testing.assert_array_equal(m.array, a)
    assert m.name == "a"
    assert m.file_sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


@same_folder
@given(a=real_matrices, mark=st.sampled_from([",", ";", "\t", " "]), suffix=st.sampled_from(["csv", "txt", "tsv"]))
def test_text_of_numbers_comes_back(a: np.ndarray, mark: str, suffix: str, tmp_path: Path) -> None:
    np.savetxt(tmp_path / f"a.{suffix}", a, delimiter=mark, fmt="%.17g")
    assert same_bits(sb.load(tmp_path / f"a.{suffix}").array, a)


@same_folder
@example(a=np.array([[1.3e308 + 1.3e308j]]), mark=",", unit="i", brackets=False)  # its modulus overflows
@given(
    a=complex_matrices, mark=st.sampled_from([",", ";", "\t", " "]), unit=st.sampled_from("ij"), brackets=st.booleans()
)
def test_complex_text_comes_back(a: np.ndarray, mark: str, unit: str, brackets: bool, tmp_path: Path) -> None:
    def written(z: complex) -> str:
        text = f"{z.real!r}{'' if z.imag < 0 or str(z.imag)[0] == '-' else '+'}{z.imag!r}{unit}"
        return f"({text})" if brackets else text

    lines = [mark.join(written(complex(z)) for z in row) for row in a]
    (tmp_path / "a.csv").write_text("\n".join(lines))
    assert same_bits(sb.load(tmp_path / "a.csv").array, a)


def test_complex_text_as_numpy_writes_it(tmp_path: Path) -> None:
    a = np.array([[1 + 2j, -3.5 - 4e-7j], [0.25j, -1e300 + 0j]])
    np.savetxt(tmp_path / "a.txt", a)
    np.testing.assert_array_equal(sb.load(tmp_path / "a.txt").array, a)
    np.savetxt(tmp_path / "a.csv", a, delimiter=",")
    np.testing.assert_array_equal(sb.load(tmp_path / "a.csv").array, a)


def test_mixed_and_unusual_number_texts(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    path.write_text("# comment\n\n1, 2i, -.5\n1D-3, 1.5e2+i, 3.\n% more\n4, 0-2.5J, 1 + 2i\n", encoding="utf-8-sig")
    expected = np.array([[1, 2j, -0.5], [1e-3, 150 + 1j, 3], [4, -2.5j, 1 + 2j]])
    np.testing.assert_array_equal(sb.load(path).array, expected)


@pytest.mark.parametrize("layout", ["csr", "csc", "coo", "bsr", "dia", "lil", "dok"])
@pytest.mark.parametrize("container", ["array", "matrix"])
def test_every_sparse_layout(layout: str, container: str) -> None:
    rng = np.random.default_rng(4)
    a = np.where(rng.random((9, 9)) < 0.3, rng.random((9, 9)), 0.0)
    made = getattr(scipy.sparse, f"{layout}_{container}")(a)
    m = sb.load(made)
    assert same_bits(m.array, a)
    assert "expanded to a dense one" in m.notes[-1]


@pytest.mark.parametrize("layout", ["csr", "csc", "coo", "bsr", "dia"])
def test_sparse_npz_of_scipy(layout: str, tmp_path: Path) -> None:
    a = np.diag(np.arange(1.0, 8.0)) + np.diag(np.full(6, 0.5), 1)
    scipy.sparse.save_npz(tmp_path / "a.npz", scipy.sparse.coo_array(a).asformat(layout))
    assert same_bits(sb.load(tmp_path / "a.npz").array, a)


def test_repeated_sparse_entries_are_added_exactly_and_said() -> None:
    # As int8 the sum 100 + 100 would wrap around.
    twice = scipy.sparse.coo_array((np.array([100, 100], dtype=np.int8), ([0, 0], [1, 1])), shape=(2, 2))
    m = sb.load(twice)
    assert m.array[0, 1] == 200.0
    assert any("more than once" in note for note in m.notes)


# --- Matrix Market: the examples of the format's own description --------------------------------------------

# Boisvert, Pozo, Remington, The Matrix Market exchange formats, NISTIR 5935 (1996), and the format page of the Matrix
# Market; both examples from memory.
NIST_GENERAL = """%%MatrixMarket matrix coordinate real general
% a 5 by 5 matrix with 8 nonzeros
  5  5  8
    1     1   1.000e+00
    2     2   1.050e+01
    3     3   1.500e-02
    1     4   6.000e+00
    4     2   2.505e+02
    4     4  -2.800e+02
    4     5   3.332e+01
    5     5   1.200e+01
"""
NIST_HERMITIAN = """%%MatrixMarket matrix coordinate complex hermitian
     5     5     7
    1     1     1.0       0
    2     2    10.5       0
    4     2   250.5     22.22
    3     3     0.015     0
    4     4  -280.0       0
    5     5    12.0       0
    5     4     0.0     33.32
"""


def test_matrix_market_general_example(tmp_path: Path) -> None:
    (tmp_path / "g.mtx").write_text(NIST_GENERAL)
    expected = np.array(
        [[1, 0, 0, 6, 0], [0, 10.5, 0, 0, 0], [0, 0, 0.015, 0, 0], [0, 250.5, 0, -280, 33.32], [0, 0, 0, 0, 12]]
    )
    m = sb.load(tmp_path / "g.mtx")
    assert same_bits(m.array, expected)


def test_matrix_market_hermitian_example(tmp_path: Path) -> None:
    (tmp_path / "h.mtx").write_text(NIST_HERMITIAN)
    m = sb.load(tmp_path / "h.mtx")
    assert m.array[3, 1] == 250.5 + 22.22j
    assert m.array[1, 3] == 250.5 - 22.22j
    assert m.array[3, 4] == -33.32j
    np.testing.assert_array_equal(m.array, m.array.conj().T)
    assert any("hermitian" in note for note in m.notes)


@pytest.mark.parametrize(
    ("banner", "body", "expected"),
    [
        ("coordinate pattern general", "2 2 2\n1 2\n2 1\n", [[0, 1], [1, 0]]),
        ("coordinate integer symmetric", "2 2 2\n1 1 7\n2 1 -3\n", [[7, -3], [-3, 0]]),
        ("coordinate real skew-symmetric", "2 2 1\n2 1 0.5\n", [[0, -0.5], [0.5, 0]]),
        ("array real general", "2 2\n1\n2\n3\n4\n", [[1, 3], [2, 4]]),
        ("array integer general", "2 2\n1\n2\n3\n4\n", [[1, 3], [2, 4]]),
        ("array real symmetric", "2 2\n1\n2\n4\n", [[1, 2], [2, 4]]),
        ("array real skew-symmetric", "2 2\n5\n", [[0, -5], [5, 0]]),
        ("array complex hermitian", "2 2\n1 0\n2 3\n4 0\n", [[1, 2 - 3j], [2 + 3j, 4]]),
    ],
)
def test_matrix_market_fields_and_symmetries(banner: str, body: str, expected: Any, tmp_path: Path) -> None:
    path = tmp_path / "a.mtx"
    path.write_text(f"%%MatrixMarket matrix {banner}\n{body}")
    m = sb.load(path)
    np.testing.assert_array_equal(m.array, np.array(expected))
    assert m.array.dtype == (np.complex128 if "complex" in banner else np.float64)
    if "pattern" in banner:
        assert any("counts as 1" in note for note in m.notes)


# --- MATLAB files written by MATLAB itself and by h5py ------------------------------------------------------

MATLAB_FILES = Path(scipy.io.__file__).parent / "matlab" / "tests" / "data"


@pytest.mark.skipif(
    not (MATLAB_FILES / "test_skip_variable.mat").is_file(), reason="this scipy comes without its test data"
)
@pytest.mark.parametrize(
    ("file", "order", "key"),
    [
        ("test_skip_variable.mat", 100, "first"),
        ("big_endian.mat", 2, "floats"),
        ("little_endian.mat", 2, "floats"),
        ("testminus_7.4_GLNX86.mat", 1, "testminus"),
        ("testminus_4.2c_SOL2.mat", 1, "testminus"),
    ],
)
def test_files_that_matlab_wrote(file: str, order: int, key: str) -> None:
    # scipy's own test data (BSD-3-Clause), read in place.
    m = sb.load(MATLAB_FILES / file)
    assert (m.n, m.key) == (order, key)
    np.testing.assert_array_equal(m.array, scipy.io.loadmat(MATLAB_FILES / file)[key])


def matlab_73(path: Path, write: Callable[[Any], None]) -> Path:
    """A version 7.3 file with the block of 512 bytes that MATLAB puts in front of the HDF5 data."""
    h5py = pytest.importorskip("h5py")
    with h5py.File(path, "w", userblock_size=512) as file:
        write(file)
    with path.open("r+b") as stream:
        stream.write(b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM")
    return path


@same_folder
@given(a=matrices)
def test_matlab_73_dense(a: np.ndarray, tmp_path: Path) -> None:
    pairs = np.dtype([("real", "<f8"), ("imag", "<f8")])

    def write(file: Any) -> None:
        data = np.ascontiguousarray(a.T)
        file["A"] = data.view(pairs) if a.dtype.kind == "c" else data
        file["A"].attrs["MATLAB_class"] = np.bytes_("double")
        file["text"] = np.array([[72, 105]], dtype=np.uint16)
        file["text"].attrs["MATLAB_class"] = np.bytes_("char")

    m = sb.load(matlab_73(tmp_path / "a.mat", write))
    assert same_bits(m.array, a)
    assert m.key == "A"


def test_matlab_73_sparse_logical_and_empty(tmp_path: Path) -> None:
    a = scipy.sparse.csc_array(np.array([[0, 2.0, 0], [1, 0, 0], [0, 0, -3]]))

    def write(file: Any) -> None:
        group = file.create_group("S")
        group.attrs["MATLAB_sparse"] = np.uint64(3)
        group.attrs["MATLAB_class"] = np.bytes_("double")
        group["data"], group["ir"], group["jc"] = a.data, a.indices.astype(np.uint64), a.indptr.astype(np.uint64)
        nothing = file.create_group("Z")
        nothing.attrs["MATLAB_sparse"] = np.uint64(2)
        nothing["jc"] = np.zeros(3, dtype=np.uint64)
        file["L"] = np.array([[1, 0], [1, 1]], dtype=np.uint8)
        file["L"].attrs["MATLAB_class"] = np.bytes_("logical")
        file["E"] = np.array([0, 0], dtype=np.uint64)
        file["E"].attrs["MATLAB_class"] = np.bytes_("double")
        file["E"].attrs["MATLAB_empty"] = np.uint8(1)

    path = matlab_73(tmp_path / "a.mat", write)
    np.testing.assert_array_equal(sb.load(path, key="S").array, a.toarray())
    np.testing.assert_array_equal(sb.load(path, key="Z").array, np.zeros((2, 2)))
    m = sb.load(path, key="L")
    np.testing.assert_array_equal(m.array, [[1.0, 1.0], [0.0, 1.0]])
    assert "Truth values of type bool" in m.notes[0]
    refused(path, "empty (0 × 0)", key="E")
    refused(path, "3 square arrays", "S (3 × 3)", "choose one with key")


def test_matlab_73_links_and_outside_data_are_not_followed(tmp_path: Path) -> None:
    h5py = pytest.importorskip("h5py")
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["A"] = np.eye(3)
    np.eye(3).tofile(tmp_path / "raw.bin")

    def write(file: Any) -> None:
        file["outside"] = h5py.ExternalLink(str(tmp_path / "other.h5"), "/A")
        file["B"] = np.eye(2)
        file["soft"] = h5py.SoftLink("/B")
        file.create_dataset("raw", shape=(3, 3), dtype="f8", external=[(str(tmp_path / "raw.bin"), 0, 72)])
        layout = h5py.VirtualLayout(shape=(3, 3), dtype="f8")
        layout[:] = h5py.VirtualSource(str(tmp_path / "other.h5"), "A", shape=(3, 3))
        file.create_virtual_dataset("virtual", layout)

    path = matlab_73(tmp_path / "a.mat", write)
    for key, words in {
        "outside": "not followed",
        "soft": "not followed",
        "raw": "other files",
        "virtual": "other files",
    }.items():
        refused(path, words, key=key)
    assert sb.load(path).key == "B"


def test_matlab_73_without_h5py_says_what_to_install(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = matlab_73(tmp_path / "a.mat", lambda file: file.__setitem__("A", np.eye(2)))
    monkeypatch.setitem(__import__("sys").modules, "h5py", None)
    refused(path, "needs h5py", "schurbench[formats]")


# --- objects ------------------------------------------------------------------------------------------------


def test_lists_and_nested_sequences() -> None:
    assert same_bits(sb.load([[1, 2], [3, 4]]).array, np.array([[1.0, 2.0], [3.0, 4.0]]))
    assert same_bits(sb.load([[0.5]]).array, np.array([[0.5]]))
    assert sb.load(([1, 2j], [3, 4])).array.dtype == np.complex128


def test_the_users_array_is_neither_aliased_nor_changed() -> None:
    a = np.arange(9.0).reshape(3, 3)
    before = a.copy()
    m = sb.load(a)
    assert a.flags.writeable
    assert not m.array.flags.writeable
    assert not np.shares_memory(a, m.array)
    a[0, 0] = 99.0
    np.testing.assert_array_equal(m.array, before)
    with pytest.raises(ValueError, match="read-only"):
        m.array[0, 0] = 1.0


def test_array_views_and_subclasses() -> None:
    base = np.arange(64.0).reshape(8, 8)
    for view in (base[::2, ::2], base.T, base[::-1, ::-1], np.asfortranarray(base)):
        assert same_bits(sb.load(view).array, np.ascontiguousarray(view))
    masked = np.ma.masked_array(np.eye(2), mask=[[False, True], [False, False]])
    refused(masked, "masked entries")
    m = sb.load(np.ma.masked_array(np.eye(2)))
    assert type(m.array) is np.ndarray


def test_frames_give_labels_where_index_and_columns_agree() -> None:
    pd = pytest.importorskip("pandas")
    names = ["level", "flow", "gate"]
    values = np.arange(9.0).reshape(3, 3)
    m = sb.load(pd.DataFrame(values, index=names, columns=names))
    assert m.labels == tuple(names)
    assert same_bits(m.array, values)
    assert m.label(1) == "flow"
    assert sb.load(pd.DataFrame(values)).labels is None
    other = sb.load(pd.DataFrame(values, index=names, columns=["a", "b", "c"]))
    assert other.labels is None
    assert "differ" in other.notes[0]
    pairs = pd.MultiIndex.from_product([["reach 1"], ["level", "flow", "gate"]])
    assert sb.load(pd.DataFrame(values, index=pairs, columns=pairs)).labels == (
        "reach 1 / level",
        "reach 1 / flow",
        "reach 1 / gate",
    )


def test_frames_with_nullable_mixed_or_unusable_columns() -> None:
    pd = pytest.importorskip("pandas")
    whole = pd.DataFrame({"a": pd.array([1, 2], dtype="Int64"), "b": pd.array([0.5, 1.5], dtype="Float64")})
    assert same_bits(sb.load(whole).array, np.array([[1, 0.5], [2, 1.5]]))
    refused(pd.DataFrame({"a": pd.array([1, None], dtype="Int64"), "b": [1, 2]}), "missing value at row 1, column 0")
    refused(pd.DataFrame({"a": ["x", "y"], "b": [1, 2]}), "column 'a'", "not numbers")
    # Mixed with a float column, pandas itself would round this integer on the way to one array.
    refused(pd.DataFrame({"a": [2**53 + 1, 1], "b": [0.5, 1]}), "column 'a'", "2**53")
    refused(pd.DataFrame(), "empty")


class Model:
    """A state-space model as many libraries shape it."""

    def __init__(self, A: Any, **more: Any) -> None:
        self.A = A
        for name, value in more.items():
            setattr(self, name, value)


def test_models_with_a_square_A() -> None:
    a = np.array([[0.0, 1.0], [-2.0, -3.0]])
    m = sb.load(Model(a, B=np.ones((2, 1)), state_labels=["position", "velocity"]))
    assert same_bits(m.array, a)
    assert m.labels == ("position", "velocity")
    assert not np.shares_memory(m.array, a)
    for harmless in (None, np.eye(2), [[1, 0], [0, 1]], np.array([]), scipy.sparse.eye_array(2)):
        assert same_bits(sb.load(Model(a, E=harmless)).array, a)
    assert sb.load(Model(scipy.sparse.csr_array(a))).n == 2
    for attribute in ("E", "M", "mass"):
        for mass in (
            2 * np.eye(2),
            scipy.sparse.csc_array(np.diag([1.0, 0.0])),
            np.eye(3),
            np.ones(2),
            "text",
            object(),
        ):
            refused(Model(a, **{attribute: mass}), f"carries {attribute}", "not the identity")
    refused(Model(np.ones((2, 3))), "2 × 3", "not square")
    refused(Model("text"), "0 dimensions")


def test_a_working_matrix_passes_through() -> None:
    m = sb.load(np.eye(3))
    assert sb.load(m) is m
    named = sb.load(m, labels=["a", "b", "c"], name="plant")
    assert named.labels == ("a", "b", "c")
    assert named.name == "plant"
    assert named.sha256 == m.sha256
    assert m.labels is None
    refused(m, "leave key out", key="A")


def test_objects_that_are_no_matrices() -> None:
    refused(3.5, "not a matrix")
    refused(None, "NoneType")
    refused(b"\x93NUMPY", "bytes")
    refused({"A": 1}, "dict")
    refused([[1, 2], [3]], "rows of equal length")
    refused([], "1 dimension")
    refused([["a", "b"], ["c", "d"]], "text")
    refused([[1, None], [2, 3]], "Python objects")
    refused(np.array([["2020-01-01"]], dtype="datetime64[D]"), "dates")
    refused(np.zeros((2, 2), dtype=[("a", "f8")]), "not plain numbers")
    refused(np.float64(3.0), "0 dimensions")
    refused(np.zeros((2, 2, 2)), "3 dimensions")
    refused(np.zeros((0, 0)), "empty (0 × 0)")
    refused(np.zeros((0, 3)), "0 × 3")
    refused(scipy.sparse.csr_array((2, 3)), "2 × 3")


def test_not_finite_names_the_first_place_in_row_order() -> None:
    a = np.eye(4)
    a[2, 1], a[1, 3] = np.nan, -np.inf
    refused(a, "infinite at row 1, column 3, counted from 0", "2 such entries")
    a[1, 3] = 0.0
    refused(a, "NaN at row 2, column 1")
    refused(np.array([[complex(0, np.nan)]]), "NaN at row 0, column 0")
    refused(scipy.sparse.csr_array(a), "NaN at row 2, column 1")


# --- widening -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "dtype",
    [
        "bool",
        "int8",
        "uint8",
        "int16",
        "uint16",
        "int32",
        "uint32",
        "int64",
        "uint64",
        "float16",
        "float32",
        "complex64",
    ],
)
def test_narrow_types_are_widened_exactly_and_said(dtype: str) -> None:
    rng = np.random.default_rng(7)
    a = (rng.integers(0, 100, (5, 5)) / (1 if np.dtype(dtype).kind in "biu" else 3)).astype(dtype)
    m = sb.load(a)
    np.testing.assert_array_equal(m.array, a)
    assert m.array.dtype == (np.complex128 if dtype == "complex64" else np.float64)
    assert len([note for note in m.notes if f"type {dtype} were widened" in note]) == 1


@pytest.mark.parametrize("sign", [1, -1])
def test_integers_are_taken_up_to_2_to_the_53(sign: int) -> None:
    assert sb.load(np.array([[sign * 2**53]])).array[0, 0] == sign * 2.0**53
    refused(np.array([[sign * (2**53 + 1)]]), str(sign * (2**53 + 1)), "2**53")
    refused([[sign * (2**53 + 1)]], "2**53")
    refused([[sign * (2**53 + 1), 0.5], [1, 1]], "2**53")
    refused(scipy.sparse.coo_array(np.array([[sign * (2**53 + 1)]])), "2**53")


def test_the_extremes_of_64_bit_integers_are_refused() -> None:
    refused(np.array([[np.iinfo(np.int64).min]]), str(-(2**63)))
    refused(np.array([[np.iinfo(np.uint64).max]], dtype=np.uint64), str(2**64 - 1))
    refused([[2**70]], "Python objects")


@pytest.mark.skipif(np.finfo(np.longdouble).bits == 64, reason="long double is float64 on this machine")
def test_long_doubles_are_refused() -> None:
    refused(np.eye(2, dtype=np.longdouble), "wider than float64")
    refused(np.eye(2, dtype=np.clongdouble), "wider than complex128")


def test_a_complex_matrix_without_imaginary_parts_stays_complex_and_says_so() -> None:
    m = sb.load(np.eye(2, dtype=complex))
    assert m.array.dtype == np.complex128
    assert "imaginary part is zero" in m.notes[0]


# --- keys, labels, names, hashes ----------------------------------------------------------------------------


def test_npz_keys(tmp_path: Path) -> None:
    path = tmp_path / "model.npz"
    np.savez(path, A=np.eye(3), B=np.ones((3, 1)), E=2 * np.eye(3), text=np.array("x"))
    message = refused(path, "2 square arrays", "A (3 × 3)", "E (3 × 3)", "choose one with key")
    assert "B" not in message
    m = sb.load(path, key="E")
    assert (m.key, m.notes, m.array[0, 0]) == ("E", (), 2.0)
    refused(path, "no array named 'C'", "B (3 × 1)", key="C")
    refused(path, "3 × 1", key="B")
    refused(path, "a string", key=3)
    np.savez(path, A=np.eye(3), B=np.ones((3, 1)))
    m = sb.load(path)
    assert m.key == "A"
    assert m.notes == ("A (3 × 3) was taken: the only square array of numbers among the 2 in the file.",)
    np.savez(path, b=np.ones((3, 1)), c=np.ones((1, 3)))
    refused(path, "no square array", "b (3 × 1)", "c (1 × 3)")
    np.save(tmp_path / "a.npy", np.eye(2))
    refused(tmp_path / "a.npy", "leave key out", key="A")


def test_labels_given_by_list_or_file(tmp_path: Path) -> None:
    a = np.eye(3)
    assert sb.load(a, labels=["x", " y ", "z"]).labels == ("x", "y", "z")
    names = tmp_path / "names.txt"
    names.write_text("niveau amont\nvitesse été\nz\n\n", encoding="utf-8")
    assert sb.load(a, labels=names).labels == ("niveau amont", "vitesse été", "z")
    assert sb.load(a, labels=str(names)).labels == ("niveau amont", "vitesse été", "z")
    refused(a, "2 labels were given for 3 states", labels=["x", "y"])
    refused(a, "4 labels", labels=("x", "y", "z", "w"))
    refused(a, "label 1", labels=["x", 2, "z"])
    refused(a, "label 2", labels=["x", "y", ""])
    refused(a, "label 0", labels=["x\ny", "y", "z"])
    refused(a, "list of 3 names", labels=5)
    refused(a, "does not exist", labels=tmp_path / "nothing.txt")
    names.write_bytes(b"\xff\xfe\x00")
    refused(a, "UTF-8", labels=names)
    refused(a, "short printable name", name=" ")


@pytest.mark.parametrize(
    ("text", "labels"),
    [
        ("level,flow\n1,2\n3,4\n", ("level", "flow")),
        (",level,flow\nlevel,1,2\nflow,3,4\n", ("level", "flow")),
        ("state,level,flow\nlevel,1,2\nflow,3,4\n", ("level", "flow")),
        ("level flow\nlevel 1 2\nflow 3 4\n", ("level", "flow")),
        ("level;1;2\nflow;3;4\n", ("level", "flow")),
        ('"gate, upper"\t"gate, lower"\n1\t2\n3\t4\n', ("gate, upper", "gate, lower")),
        (",0,1\n0,1,2\n1,3,4\n", None),
        (",a,b\nc,1,2\nd,3,4\n", None),
        ("1,2,\n3,4,\n", None),
        ("a,b,\n1,2,\n3,4,\n", ("a", "b")),
    ],
)
def test_names_in_text_files(text: str, labels: tuple[str, ...] | None, tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text(text)
    m = sb.load(tmp_path / "a.csv")
    assert same_bits(m.array, np.array([[1.0, 2.0], [3.0, 4.0]]))
    assert m.labels == labels


def test_a_frame_written_by_pandas_reads_back_with_its_labels(tmp_path: Path) -> None:
    pd = pytest.importorskip("pandas")
    names = ["level", "flow", "gate"]
    values = np.random.default_rng(3).standard_normal((3, 3))
    pd.DataFrame(values, index=names, columns=names).to_csv(tmp_path / "a.csv")
    m = sb.load(tmp_path / "a.csv")
    assert same_bits(m.array, values)
    assert m.labels == tuple(names)
    pd.DataFrame(values).to_csv(tmp_path / "b.csv")
    assert same_bits(sb.load(tmp_path / "b.csv").array, values)


def test_names_sources_and_hashes(tmp_path: Path) -> None:
    path = tmp_path / "plant.npy"
    np.save(path, np.eye(2))
    m = sb.load(str(path))
    assert m.name == "plant"
    assert m.source == str(path)
    assert m.file_sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    # The array's hash, from its definition: type, shape and little-endian row-major bytes.
    assert m.sha256 == hashlib.sha256(b"float64|2x2|" + np.eye(2, dtype="<f8").tobytes()).hexdigest()
    assert sb.load(np.eye(2)).sha256 == m.sha256
    assert sb.load(np.eye(2)).file_sha256 is None
    assert sb.load(np.eye(2) + 0j).sha256 != m.sha256
    assert sb.load(path, name="canal").name == "canal"


# --- files that must be refused -----------------------------------------------------------------------------


def write_npy_header(shape: tuple[int, ...], descr: str = "<f8") -> bytes:
    buffer = io.BytesIO()
    np.lib.format.write_array_header_1_0(buffer, {"descr": descr, "fortran_order": False, "shape": shape})
    return buffer.getvalue()


def npy_bytes(a: np.ndarray) -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, a)
    return buffer.getvalue()


def mat_bytes(**variables: Any) -> bytes:
    buffer = io.BytesIO()
    scipy.io.savemat(buffer, variables, do_compression=True)
    return buffer.getvalue()


class Trap:
    """Unpickling this would raise; no data file may get that far."""

    def __reduce__(self) -> Any:
        return (pytest.fail, ("a data file ran code",))


MTX = "%%MatrixMarket matrix coordinate real general\n"

BAD_FILES: dict[str, tuple[str, bytes, str]] = {
    "empty file": ("a.npy", b"", "0 bytes"),
    "truncated npy": ("a.npy", npy_bytes(np.eye(5))[:-8], "truncated"),
    "npy with bytes after its data": ("a.npy", npy_bytes(np.eye(5)) + b"tail", "damaged"),
    "npy cut in its header": ("a.npy", npy_bytes(np.eye(5))[:40], "header"),
    "pickle under another suffix": ("a.npy", pickle.dumps(Trap()), "not a NumPy array file"),
    "pickled objects in npy": ("a.npy", npy_bytes(np.array([[Trap()]], dtype=object)), "never unpickled"),
    "text in npy": ("a.npy", npy_bytes(np.array([["a"]])), "text"),
    "npy larger than any machine": ("a.npy", write_npy_header((10**7, 10**7)), "truncated"),
    "negative shape": ("a.npy", write_npy_header((-1, -1)), "damaged header"),
    "not square": ("a.npy", npy_bytes(np.ones((2, 3))), "2 × 3"),
    "no entries": ("a.npy", npy_bytes(np.ones((0, 0))), "empty"),
    "infinity": ("a.npy", npy_bytes(np.array([[np.inf]])), "infinite at row 0, column 0"),
    "not a zip": ("a.npz", b"PK but not really", "truncated"),
    "unknown suffix": ("a.xlsx", b"something", "unknown suffix"),
    "no suffix": ("a", b"1 2\n3 4\n", "unknown suffix"),
    "gzip of something else": ("a.csv.gz", gzip.compress(b"1"), "unknown suffix"),
    "truncated mat": ("a.mat", mat_bytes(A=np.eye(30))[:-20], "truncated"),
    "noise as mat": ("a.mat", bytes(range(256)) * 3, "MATLAB"),
    "mat without numbers": ("a.mat", mat_bytes(text="hello", more="you"), "no square array"),
    "mat with text only": ("a.mat", mat_bytes(text="hello"), "class char"),
    "broken HDF5": ("a.mat", b"\x89HDF\r\n\x1a\n" + b"\0" * 600, "MATLAB"),
    "mtx without banner": ("a.mtx", b"3 3 1\n1 1 1\n", "does not start"),
    "mtx without size": ("a.mtx", (MTX + "% only comments\n").encode(), "size line"),
    "mtx truncated": ("a.mtx", (MTX + "3 3 3\n1 1 1.0\n2 2 1.0\n").encode(), "truncated"),
    "mtx index outside": ("a.mtx", (MTX + "2 2 1\n3 1 1.0\n").encode(), "row 3, column 1"),
    "mtx with words": ("a.mtx", (MTX + "2 2 1\n1 1 one\n").encode(), "'1 1 one' at line 3"),
    "mtx not square": ("a.mtx", (MTX + "2 3 1\n1 1 1.0\n").encode(), "2 × 3"),
    "mtx with NaN": ("a.mtx", (MTX + "2 2 1\n2 1 nan\n").encode(), "NaN at row 1, column 0"),
    "mtx vector object": ("a.mtx", b"%%MatrixMarket vector coordinate real general\n2 1\n1 1\n", "does not start"),
    "mtx integer too long": (
        "a.mtx",
        b"%%MatrixMarket matrix coordinate integer general\n1 1 1\n1 1 9007199254740993\n",
        "2**53",
    ),
    "mtx of an unknown kind": ("a.mtx", b"%%MatrixMarket matrix coordinate quaternion general\n", "quaternion"),
    "mtx array of patterns": ("a.mtx", b"%%MatrixMarket matrix array pattern general\n1 1\n", "pattern"),
    "mtx with too many entries": ("a.mtx", (MTX + "2 2 1\n1 1 1\n2 2 1\n").encode(), "more than the 1 entries"),
    "mtx with a value too many": ("a.mtx", (MTX + "2 2 1\n1 1 1 5\n").encode(), "at line 3"),
    "mtx with a fraction among integers": (
        "a.mtx",
        b"%%MatrixMarket matrix coordinate integer general\n1 1 1\n1 1 1.5\n",
        "integer coordinate",
    ),
    "mtx symmetric with both triangles": (
        "a.mtx",
        b"%%MatrixMarket matrix coordinate real symmetric\n2 2 2\n2 1 1\n1 2 1\n",
        "above the diagonal",
    ),
    "mtx skew with a diagonal": (
        "a.mtx",
        b"%%MatrixMarket matrix coordinate real skew-symmetric\n2 2 1\n1 1 3\n",
        "on the diagonal",
    ),
    "mtx hermitian with a complex diagonal": (
        "a.mtx",
        b"%%MatrixMarket matrix coordinate complex hermitian\n2 2 1\n1 1 3 1\n",
        "on the diagonal",
    ),
    "mtx.gz that is no gzip": ("a.mtx.gz", MTX.encode(), "truncated"),
    "mtx.gz cut short": (
        "a.mtx.gz",
        gzip.compress(b"%%MatrixMarket matrix array real general\n5 5\n" + b"0.25\n" * 25)[:-12],
        "truncated",
    ),
    "csv with ragged rows": ("a.csv", b"1,2\n3\n", "1 fields at line 2"),
    "csv with too few rows": ("a.csv", b"1,2,3\n4,5,6\n", "2 × 3"),
    "csv with a word": ("a.csv", b"1,2\n3,four\n", "'four' at line 2"),
    "csv with an empty field": ("a.csv", b"1,2\n,4\n", "'' at line 2"),
    "csv with decimal commas": ("a.csv", b"1,5;2\n3;4\n", "decimal point"),
    "csv with underscores": ("a.csv", b"1,2_0\n3,4\n", "'2_0' at line 1"),
    "csv with an integer too long": ("a.csv", b"9007199254740993\n", "cannot hold exactly"),
    "csv with NaN": ("a.csv", b"1,2\nnan,4\n", "NaN at row 1, column 0"),
    "csv with an overflow": ("a.csv", b"1e999\n", "infinite at row 0"),
    "csv of names only": ("a.csv", b"a,b,c\n", "no numbers"),
    "csv of comments only": ("a.csv", b"# nothing\n\n", "no numbers"),
    "binary as text": ("a.txt", b"\x00\x01\x02", "not text"),
    "other encoding": ("a.txt", "1 2\n3 4é\n".encode("latin-1"), "UTF-8"),
    "a program": ("a.csv", b"__import__('os').system('true')\n", "not a number"),
}


@pytest.mark.parametrize("case", BAD_FILES)
def test_bad_files_give_one_clear_line(case: str, tmp_path: Path) -> None:
    name, content, words = BAD_FILES[case]
    path = tmp_path / name
    path.write_bytes(content)
    refused(path, words, name)


def test_paths_that_are_no_files(tmp_path: Path) -> None:
    refused(tmp_path, "is a directory")
    refused(tmp_path / "missing.npy", "does not exist")
    refused("a\0b.npy")
    refused("two\nlines.npy", "does not exist")
    if Path("/dev/zero").exists():
        refused("/dev/zero", "not a regular file")


def test_a_suffix_in_capitals_is_understood(tmp_path: Path) -> None:
    (tmp_path / "A.CSV").write_text("1,2\n3,4\n")
    assert sb.load(tmp_path / "A.CSV").n == 2


@pytest.mark.parametrize("data", [b"", b"\x00" * 50, bytes(range(200, 256)) * 4])
@pytest.mark.parametrize("name", ["a.npy", "a.npz", "a.mat", "a.mtx", "a.mtx.gz", "a.csv"])
def test_noise_in_any_format_is_one_line(name: str, data: bytes, tmp_path: Path) -> None:
    (tmp_path / name).write_bytes(data)
    refused(tmp_path / name, name)


def load_or_refusal(path: Path) -> sb.WorkingMatrix | str:
    try:
        return sb.load(path)
    except sb.InputError as error:
        return str(error)


@same_folder
@given(cut=st.integers(1, 400), kind=st.sampled_from(["npy", "npz", "mat", "mtx"]))
def test_a_file_cut_anywhere_is_refused_or_unchanged(cut: int, kind: str, tmp_path: Path) -> None:
    a = np.random.default_rng(11).standard_normal((6, 6))
    path = tmp_path / f"a.{kind}"
    if kind == "npy":
        np.save(path, a)
    elif kind == "npz":
        np.savez_compressed(path, A=a)
    elif kind == "mat":
        scipy.io.savemat(path, {"A": a}, do_compression=True)
    else:
        scipy.io.mmwrite(path, a, precision=17)
    content = path.read_bytes()
    path.write_bytes(content[: max(len(content) - cut, 0)])
    m = load_or_refusal(path)
    if isinstance(m, str):
        assert m.isprintable()
    else:
        # A cut last digit, or line break, cannot be seen in plain text.
        assert kind == "mtx"
        assert np.count_nonzero(m.array != a) <= 1


# --- memory: asked before it is taken -----------------------------------------------------------------------


@pytest.fixture
def small_machine(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(limits, "available_bytes", lambda: 1_000_000)


@pytest.mark.usefixtures("small_machine")
def test_size_is_refused_from_the_header_alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def never(*_: Any, **__: Any) -> None:
        pytest.fail("data was read before its size was checked")

    a = np.zeros((200, 200))
    np.save(tmp_path / "a.npy", a)
    np.savez_compressed(tmp_path / "a.npz", A=a)
    scipy.io.savemat(tmp_path / "a.mat", {"A": a})
    matlab_73(tmp_path / "b.mat", lambda file: file.__setitem__("A", a))
    (tmp_path / "a.mtx").write_text(MTX + "200 200 1\n1 1 1.0\n")
    with gzip.open(tmp_path / "a.mtx.gz", "wt") as stream:
        stream.write(MTX + "200 200 1\n1 1 1.0\n")
    np.savetxt(tmp_path / "a.csv", a, delimiter=",", fmt="%g")
    monkeypatch.setattr(np.lib.format, "read_array", never)
    monkeypatch.setattr(scipy.io, "loadmat", never)
    monkeypatch.setattr(scipy.io, "mmread", never)
    for name in ("a.npy", "a.npz", "a.mat", "b.mat", "a.mtx", "a.mtx.gz", "a.csv"):
        refused(
            tmp_path / name,
            "200 × 200",
            "320 kB as a dense real matrix",
            "3.2 MB for a run",
            "1 MB of memory is available",
        )
    refused(a, "200 × 200")
    refused(scipy.sparse.eye_array(200, format="csr"), "200 × 200")


def test_a_sparse_file_of_a_few_bytes_cannot_ask_for_any_memory(tmp_path: Path) -> None:
    (tmp_path / "a.mtx").write_text(MTX + "100000000 100000000 1\n1 1 1.0\n")
    refused(tmp_path / "a.mtx", "100000000 × 100000000", "80 PB")
    (tmp_path / "b.mtx").write_text(MTX + "3 3 900000000000000\n1 1 1.0\n")
    refused(tmp_path / "b.mtx", "expands to")
    scipy.sparse.save_npz(tmp_path / "a.npz", scipy.sparse.csr_array((10**7, 10**7)))
    refused(tmp_path / "a.npz", "10000000 × 10000000")


def test_matrix_market_numbers_as_fortran_and_others_write_them(tmp_path: Path) -> None:
    path = tmp_path / "a.mtx"
    path.write_bytes(
        (MTX + "% c\n\n3 3 4\n1 1 1.5D+3\n\n  2\t2   +.5d-1  \n% c\n3 3 -7.\n1 3 1E5").replace("\n", "\r\n").encode()
    )
    np.testing.assert_array_equal(sb.load(path).array, [[1500, 0, 1e5], [0, 0.05, 0], [0, 0, -7]])


def test_a_gzip_that_expands_beyond_its_announcement_is_refused(tmp_path: Path) -> None:
    with gzip.open(tmp_path / "a.mtx.gz", "wb") as stream:
        stream.write((MTX + "2 2 1\n1 1 1.0\n").encode() + b" " * 5_000_000)
    refused(tmp_path / "a.mtx.gz", "more than 4096 bytes at line 4")
    with gzip.open(tmp_path / "a.mtx.gz", "wb") as stream:
        stream.write((MTX + "2 2 1\n1 1 1.0\n").encode() + b"\n" * 5_000_000)
    refused(tmp_path / "a.mtx.gz", "far longer than the entries")
    with gzip.open(tmp_path / "a.mtx.gz", "wb") as stream:
        stream.write(MTX.encode() + b"%\n" * 5_000_000)
    refused(tmp_path / "a.mtx.gz", "far longer than the entries")


def test_an_npz_member_must_have_the_size_its_header_announces(tmp_path: Path) -> None:
    for content, words in (
        (write_npy_header((2, 2)) + b"\0" * 3_000_000, "damaged"),
        (write_npy_header((2, 2)) + b"\0" * 8, "truncated"),
        (write_npy_header((4000000, 4000000)), "truncated"),
    ):
        with zipfile.ZipFile(tmp_path / "a.npz", "w", zipfile.ZIP_DEFLATED) as archive:
            archive.writestr("A.npy", content)
        refused(tmp_path / "a.npz", words)
    np.savez(tmp_path / "p.npz", A=np.array([[Trap()]], dtype=object))
    refused(tmp_path / "p.npz", "never unpickled")
    np.savez(tmp_path / "q.npz", A=np.array([[Trap()]], dtype=object), B=np.eye(2))
    assert sb.load(tmp_path / "q.npz").key == "B"


def test_a_flipped_bit_in_an_npz_is_noticed(tmp_path: Path) -> None:
    path = tmp_path / "a.npz"
    np.savez(path, A=np.full((40, 40), 1.5))
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(bytes(content))
    refused(path, "damaged")


@pytest.mark.usefixtures("small_machine")
def test_only_the_chosen_variable_of_a_mat_file_is_expanded(tmp_path: Path) -> None:
    path = tmp_path / "a.mat"
    scipy.io.savemat(path, {"B": np.zeros((2000, 3000)), "A": np.eye(2)}, do_compression=True)
    assert sb.load(path, key="A").n == 2


def test_a_mat_variable_longer_than_its_dimensions_is_refused(tmp_path: Path) -> None:
    buffer = io.BytesIO()
    scipy.io.savemat(buffer, {"A": np.zeros((2000, 300))})
    raw = buffer.getvalue()
    body = raw[128:].replace(struct.pack("<ii", 2000, 300), struct.pack("<ii", 2, 2), 1)
    for element in (body, struct.pack("<II", 15, len(zlib.compress(body))) + zlib.compress(body)):
        (tmp_path / "a.mat").write_bytes(raw[:128] + element)
        refused(tmp_path / "a.mat", "contradicts the header")


@settings(same_folder, max_examples=150)
@given(place=st.integers(0, 111), value=st.integers(0, 255), sparse=st.booleans(), zipped=st.booleans())
def test_a_wrong_byte_in_a_mat_file_cannot_bring_the_process_down(
    place: int, value: int, sparse: bool, zipped: bool, tmp_path: Path
) -> None:
    """The type codes, sizes, flags and names of a variable, each byte in turn: scipy alone crashes on some."""
    a = np.arange(1.0, 10.0).reshape(3, 3)
    buffer = io.BytesIO()
    scipy.io.savemat(buffer, {"A": scipy.sparse.csc_array(a) if sparse else a + 0.5j})
    raw = bytearray(buffer.getvalue())
    raw[128 + place] = value
    body = bytes(raw[128:])
    packed = struct.pack("<II", 15, len(zlib.compress(body))) + zlib.compress(body) if zipped else body
    (tmp_path / "a.mat").write_bytes(bytes(raw[:128]) + packed)
    m = load_or_refusal(tmp_path / "a.mat")
    assert m.isprintable() if isinstance(m, str) else m.n >= 1


def test_what_the_machine_says_about_its_memory(monkeypatch: pytest.MonkeyPatch) -> None:
    room = limits.available_bytes()
    assert room is None or 2**20 < room < 2**60
    assert limits.run_bytes(1000) == limits.ARRAYS_IN_A_RUN * 8_000_000
    assert limits.run_bytes(1000, is_complex=True) == 2 * limits.run_bytes(1000)
    monkeypatch.setattr(limits, "available_bytes", lambda: None)
    limits.require_room(100, is_complex=True, what="a")
    with pytest.raises(sb.InputError, match="does not tell its memory"):
        limits.require_room(10**6, is_complex=False, what="a")
    assert [limits.readable_size(n) for n in (0, 999, 1000, 320_000, 7.21e9, 3.2e11, 8e16)] == [
        "0 bytes",
        "999 bytes",
        "1 kB",
        "320 kB",
        "7.21 GB",
        "320 GB",
        "80 PB",
    ]


# --- the matrices of this folder ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "n"),
    [
        ("kinetics_gri30", 54),
        ("closedloop_carex15", 39),
        ("hamiltonian_carex15", 78),
        ("companion_cluster20", 20),
        ("companion_wilkinson20", 20),
        ("markov_rw136", 136),
        ("gyro_wiresaw50", 50),
    ],
)
def test_certified_matrices_are_the_ones_their_eigenvalues_belong_to(name: str, n: int, data: Path) -> None:
    """The trace equals the sum of the certified eigenvalues (data/README.md): a mix-up of files would show."""
    flint = pytest.importorskip("flint")
    m = sb.load(data / f"{name}.npz")
    assert m.n == n
    values = json.loads((data / "certified" / f"{name}.json").read_text())
    assert sum(multiplicity for *_, multiplicity in values) == n
    total = sum(flint.arb(real) * multiplicity for real, _, multiplicity in values)
    trace = sum((flint.arb(float(entry)) for entry in np.diag(m.array)), flint.arb(0))
    scale = max(1.0, *(abs(float(flint.arb(real).mid())) for real, *_ in values))
    assert abs(float((total - trace).mid())) <= 1e-14 * n * scale


@pytest.mark.parametrize(("name", "n"), [("west0067", 67), ("impcol_a", 207)])
def test_matrix_market_files_of_the_collection(name: str, n: int, data: Path) -> None:
    m = sb.load(data / f"{name}.mtx")
    assert m.n == n
    np.testing.assert_array_equal(m.array, scipy.io.mmread(data / f"{name}.mtx").toarray())


def test_every_data_file_has_its_line_of_provenance(data: Path) -> None:
    text = (data / "README.md").read_text(encoding="utf-8")
    for path in data.iterdir():
        if path.is_file() and path.name != "README.md":
            assert f"| {path.name} |" in text, f"{path.name} is not described in {data.name}/README.md"

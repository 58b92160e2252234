"""Datasets: declared types in, declared types out, and the same hash on either side."""

from __future__ import annotations

import io

import h5py
import numpy as np
import pytest

from dunhamfit.archive.schema import Item, checked, contents, digest, read_once, write, write_items, write_once
from dunhamfit.errors import ArchiveProblem

ITEMS = (
    Item("a", "f8", ("n",), "cm-1", "numbers"),
    Item("b", "i8", ("n", "m"), "1", "counts"),
    Item("c", "text", (), "text", "a text"),
    Item("d", "text", ("n",), "text", "texts"),
)
VALUES = {
    "a": np.array([0.1, -0.0, np.inf], dtype="f4"),
    "b": np.arange(6, dtype="u2").reshape(3, 2),
    "c": "\u00b5 \n",
    "d": ["", "x", "yz"],
}


@pytest.fixture
def file():
    with h5py.File(io.BytesIO(), "w") as file:
        yield file


def test_declared_items_come_back(file):
    written = write_items(file, ITEMS, VALUES)
    found = checked(contents(file), ITEMS, where="/")
    assert found["a"].dtype == np.dtype("<f8") and np.array_equal(found["a"], np.float32([0.1, -0.0, np.inf]))
    assert found["b"].dtype == np.dtype("<i8") and np.array_equal(found["b"], VALUES["b"])
    assert (found["c"], found["d"]) == ("\u00b5 \n", ("", "x", "yz"))
    assert digest(found) == digest(written)
    assert {name: file[name].attrs["unit"] for name in file} == {item.name: item.unit for item in ITEMS}


@pytest.mark.parametrize("length", [0, 1, 999, 1000, 200_000])
def test_long_columns_are_compressed_without_loss(file, length, rng):
    columns = {
        "row": np.arange(length),
        "sigma": rng.choice([1e-4, 2e-4, 5e-5], length),
        "position": rng.normal(2000.0, 300.0, length),
    }
    for name, column in columns.items():
        write(file, name, column, "1")
        assert np.array_equal(file[name][()], column)
    if length > 100_000:
        assert file["row"].id.get_storage_size() < 8 * length / 20
        assert file["position"].compression is None


@pytest.mark.parametrize(
    "change",
    [
        lambda values: values | {"a": values["a"] + 1e-16 * np.array([1, 0, 0])},
        lambda values: values | {"a": values["a"][:2]},
        lambda values: values | {"b": values["b"].astype(float)},
        lambda values: values | {"b": values["b"].reshape(2, 3)},
        lambda values: values | {"d": ("", "xy", "z")},
        lambda values: values | {"d": ("x", "", "yz")},
        lambda values: values | {"c": "\u00b5 "},
        lambda values: {name + "'": value for name, value in values.items()},
        lambda values: {name: values[name] for name in "abc"},
    ],
)
def test_any_change_changes_the_hash(change):
    values = {"a": np.array([0.1, 2.0, 3.0]), "b": np.arange(6).reshape(3, 2), "c": "\u00b5 \n", "d": ("", "x", "yz")}
    assert digest(change(values)) != digest(values)
    assert digest(dict(reversed(values.items()))) == digest(values)


def test_what_is_shared_is_written_once(file):
    key = write_once(file, "things", ITEMS, VALUES)
    assert write_once(file, "things", ITEMS, VALUES) == key
    assert list(file["things"]) == [key]
    assert read_once(file, "things", key, ITEMS)["c"] == VALUES["c"]
    file[f"things/{key}/a"][0] = 7
    with pytest.raises(ArchiveProblem, match="has changed since it was stored"):
        read_once(file, "things", key, ITEMS)
    with pytest.raises(ArchiveProblem, match="/things/0123 is missing"):
        read_once(file, "things", "0123", ITEMS)


@pytest.mark.parametrize(
    ("name", "value", "text"),
    [
        ("a", None, "/a is missing"),
        ("a", np.arange(3), "/a must be f8 (got i8)"),
        ("c", ("x",), "/c must have shape () (got (1,))"),
        ("b", np.zeros((2, 2), dtype=int), "/b must have shape (3, 'm') (got (2, 2))"),
        ("d", np.zeros(3), "/d must be text (got f8)"),
    ],
)
def test_what_is_not_as_declared_is_refused(file, name, value, text):
    write_items(file, ITEMS, VALUES)
    del file[name]
    if value is not None:
        write(file, name, value, "1")
    with pytest.raises(ArchiveProblem) as caught:
        checked(contents(file), ITEMS, where="")
    assert str(caught.value) == f"{text}: the archive is damaged"


def test_no_other_type_is_read(file):
    file.create_dataset("x", data=np.ones(3), dtype="f4")
    with pytest.raises(ArchiveProblem, match="/x is of type float32, which no archive holds"):
        contents(file)

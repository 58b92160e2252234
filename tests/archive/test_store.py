"""The archive as its users see it: what goes in comes out, and what is wrong is said in one line."""

from __future__ import annotations

import dataclasses
import hashlib
import shutil

import h5py
import numpy as np
import pytest
from invented_runs import REFERENCE, TERMS, all_lines, one_fit, source_lines

from dunhamfit.archive.store import open_archive
from dunhamfit.errors import ArchiveProblem, UsageError
from dunhamfit.fit.design import calculate
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines, fit_model
from dunhamfit.lines.deferred import append_lines
from dunhamfit.lines.line_list import LineList, Source, line_columns, merge


def assert_same_lines(first: LineList, second: LineList) -> None:
    assert len(first) == len(second)
    for item in line_columns():
        assert np.array_equal(getattr(first, item.name), getattr(second, item.name)), item.name
    assert (first.isotopologues, first.sources, first.reasons) == (
        second.isotopologues,
        second.sources,
        second.reasons,
    )


def assert_same_record(first, second) -> None:
    """Every declared field of two records, to the last bit; whole numbers may be of another width."""
    for item in dataclasses.fields(first):
        one, other = getattr(first, item.name), getattr(second, item.name)
        if isinstance(one, np.ndarray):
            assert one.dtype.kind == other.dtype.kind and np.array_equal(one, other), item.name
        else:
            assert type(one) is type(other) and one == other, item.name


def assert_same_fit(first: Fit, second: Fit) -> None:
    assert_same_lines(first.lines, second.lines)
    for name in ("values", "factor", "residuals", "covariance", "sigmas"):
        assert np.array_equal(getattr(first, name), getattr(second, name)), name
    for name in ("noise", "groups", "statistics"):
        assert_same_record(getattr(first, name), getattr(second, name))
    for name in ("warnings", "robust"):
        assert getattr(first, name) == getattr(second, name)
    assert dict(first.origins) == dict(second.origins)
    if first.line_weights is None:
        assert second.line_weights is None
    else:
        assert np.array_equal(first.line_weights, second.line_weights)
    assert first.model.parameters == second.model.parameters
    assert [first.model.prior(item) for item in first.model.parameters] == [
        second.model.prior(item) for item in second.model.parameters
    ]
    for name in first.lines.isotopologues:
        assert first.model.isotopologue(name) == second.model.isotopologue(name)
        assert np.array_equal(first.model.mass_factors(name), second.model.mass_factors(name))


def test_every_field_of_a_fit_is_compared():
    """A field that is added to `Fit` must be stored too."""
    known = {"model", "lines", "values", "factor", "noise", "groups", "statistics", "warnings", "robust"}
    known |= {"line_weights", "origins", "design_made"}
    assert {item.name for item in dataclasses.fields(Fit)} == known


@pytest.mark.parametrize("policy", ["stated", "common", "per-source", "per-band"])
def test_a_fit_comes_back_as_it_was(tmp_path, policy):
    fit = one_fit(policy)
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        assert archive.save(fit) == 1
        assert_same_fit(fit, archive.load(1))
    with open_archive(tmp_path / "a.h5") as archive:
        loaded = archive.latest()
    assert_same_fit(fit, loaded)  # its lines are read now, after the archive was closed
    new_lines = dataclasses.replace(
        source_lines(Source("elsewhere"), "5-3", isotopologue="73Ge82Se"), sources=fit.lines.sources
    )
    for fitted in (fit, loaded):
        calculated = calculate(fitted.model, new_lines, fitted.values)
        assert np.array_equal(calculated.high, calculate(fit.model, new_lines, fit.values).high)


def test_robust_weights_warnings_and_origins_come_back(tmp_path, fit):
    weights = np.random.default_rng(5).uniform(size=len(fit.lines))
    robust = dataclasses.replace(
        fit, robust="huber", line_weights=weights, warnings=("a\nwarning",), origins={"Y12": "fixed"}
    )
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(robust)
        assert_same_fit(robust, archive.latest())


def test_mixed_sources_come_back_in_their_order(tmp_path, rng):
    mixed = all_lines().subset(rng.permutation(len(all_lines())))
    fit = one_fit(lines=mixed)
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(fit)
        assert_same_fit(fit, archive.latest())
        archive.save(archive.latest())
        assert archive.identity(1) == archive.identity(2)


def test_triangles_come_back_without_reading_lines(tmp_path):
    """A long list with few parameters: its triangles are stored and its lines stay unread."""
    lines = source_lines(Source("long", offset=1e-5), "1-0", "2-1", "2-0", j_max=60)
    fit = fit_lines(lines, TERMS, reference=REFERENCE, policy="per-band")
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(fit)
        loaded = archive.latest()
    for stored, made in zip(loaded.triangles, fit.triangles, strict=True):
        assert_same_record(made, stored)
    assert "position" not in vars(loaded.lines)


def test_a_new_source_is_added_without_reading_the_old_lines(tmp_path, fit):
    new = source_lines(Source("winter", ("w.csv",)), "3-2", seed=7)
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(fit)
        old = archive.latest()
        lines = append_lines(old.lines, new)
        archive.save(dataclasses.replace(old, lines=lines), parent=1)
        assert "position" not in vars(old.lines) and len(lines) == len(fit.lines) + len(new)
        assert archive.runs()[1].added == ("winter",)
        assert len(archive.file["lines"]) == len(fit.lines.sources) + 2  # "oven" comes in two stretches
        assert_same_lines(archive.latest().lines, merge([fit.lines, new]))


def test_200_runs_store_the_lines_once(tmp_path, fit):
    path = tmp_path / "a.h5"
    with open_archive(path, mode="a") as archive:
        for _ in range(3):
            archive.save(fit)
        three = path.stat().st_size
        groups = {name: set(archive.file[name]) for name in ("lines", "exclusions")}
        for number in range(3, 200):
            archive.save(fit, title=f"run {number}")
        assert {name: set(archive.file[name]) for name in groups} == groups
        assert archive.numbers() == tuple(range(1, 201))
    # Nothing but the runs themselves: each takes what the third took, within the blocks HDF5 hands out.
    first = three - 2 * (path.stat().st_size - three) / 197
    assert first > 0


def test_what_history_tells(path, fit):
    with open_archive(path) as archive:
        first, second = archive.runs()
        stored = archive.stored(1)
    assert (first.run, first.parent, first.title, first.sources) == (1, None, "first", ("oven", "jet"))
    assert (second.parent, second.parent_identity, second.added) == (1, first.identity, ())
    assert (first.lines, first.used) == (len(fit.lines), int(fit.lines.used.sum()))
    assert first.reduced_chi2 == fit.statistics.reduced_chi2
    assert first.time.endswith("+00:00")
    assert (stored.job_text, stored.notices) == ("title = 'first'\n", ("a notice",))
    assert {"dunhamfit", "numpy", "scipy", "h5py"} <= set(stored.versions)


def test_the_identity_is_the_hash_of_the_inputs(path):
    with open_archive(path) as archive:
        text = archive.file["runs/1/inputs"][()]
        assert archive.identity(1) == hashlib.sha256(text).hexdigest()
        assert archive.identity(1) != archive.identity(2)


def test_origin_belongs_to_the_identity(tmp_path, fit):
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(fit)
        archive.save(fit, title="another title")
        archive.save(fit, origin={"route": "relations", "relations": {"Y02": "-4*Y01**3/Y10**2"}})
        one, two, three = (archive.identity(run) for run in archive.numbers())
        assert one == two != three
        assert archive.stored(3).origin["relations"] == {"Y02": "-4*Y01**3/Y10**2"}


def test_every_dataset_has_an_explicit_type_and_a_unit(path, fit):
    with open_archive(path, mode="a") as archive:
        archive.save_posterior(1, {"draws": np.ones((4, 2), dtype="f4"), "names": ["a", "b"], "seed": 3})
    seen = []

    def look(name, thing):
        if isinstance(thing, h5py.Dataset):
            text = h5py.check_string_dtype(thing.dtype)
            assert thing.dtype in (np.dtype("<f8"), np.dtype("<i8")) or text.encoding == "utf-8", name
            assert isinstance(thing.attrs["unit"], str) and thing.attrs["unit"], name
            seen.append(name)
        for key, value in thing.attrs.items():
            assert isinstance(value, str | np.int64), (name, key)

    with h5py.File(path) as file:
        file.visititems(look)
        assert file.attrs["format_version"].dtype == np.dtype("<i8")
    assert len(seen) > 50


def test_a_reader_keeps_what_it_opened(path, fit):
    with open_archive(path) as reader:
        with open_archive(path, mode="a") as writer:
            writer.save(fit)
            assert writer.numbers() == (1, 2, 3)
        assert reader.numbers() == (1, 2)
        assert_same_fit(fit, reader.load(1))


def test_a_link_is_followed(tmp_path, path, fit):
    link = tmp_path / "link.h5"
    link.symlink_to(path)
    with open_archive(link, mode="a") as archive:
        archive.save(fit)
    assert link.is_symlink()
    with open_archive(path) as archive:
        assert archive.numbers() == (1, 2, 3)


def test_texts_longer_than_an_attribute_may_be(tmp_path, fit):
    """An HDF5 attribute ends at 64 KiB (HDF5 File Format Specification, object header message size)."""
    long = "# \u00b5 \u2212 \U0001d4b0\n" * 20_000
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(fit, job_text=long, title=long)
        assert archive.stored(1).job_text == long == archive.runs()[0].title


def test_names_of_files_in_no_encoding(tmp_path, fit):
    source = Source("odd", ("\udce9t\udce9.csv",))
    odd = fit_lines(source_lines(source, "1-0", "2-1"), TERMS, reference=REFERENCE)
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        archive.save(odd)
        assert archive.latest().lines.sources == (source,)


# --- what is wrong --------------------------------------------------------------------------------------


def refusal(path, mode="r") -> str:
    with pytest.raises(ArchiveProblem) as caught, open_archive(path, mode=mode) as archive:
        archive.latest()
    text = str(caught.value)
    assert text.startswith(f"{path}: ") and "\n" not in text
    assert caught.value.exit_code == 6
    return text


def test_wrong_use(path, fit):
    with pytest.raises(UsageError, match="mode must be 'r'"):
        open_archive(path, mode="w")
    with open_archive(path) as archive:
        with pytest.raises(UsageError, match="opened for reading"):
            archive.save(fit)
        with pytest.raises(UsageError, match="no run 7; the archive holds runs 1, 2"):
            archive.load(7)
    with pytest.raises(UsageError, match="closed"):
        archive.load(1)
    with open_archive(path, mode="a") as archive:
        with pytest.raises(UsageError, match="no run 9"):
            archive.save(fit, parent=9)
        with pytest.raises(UsageError, match="finite numbers"):
            archive.save(fit, origin={"x": float("nan")})
        assert archive.numbers() == (1, 2)


def test_no_run_yet(tmp_path):
    with open_archive(tmp_path / "a.h5", mode="a") as archive:
        assert archive.runs() == () and archive.latest_number() is None
        with pytest.raises(UsageError, match="no run yet"):
            archive.latest()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("mode", ["r", "a"])
def test_files_that_are_no_archives(tmp_path, mode):
    text, empty, other = tmp_path / "text.h5", tmp_path / "empty.h5", tmp_path / "other.h5"
    text.write_text("nu,unc\n2143.27,1e-4\n")
    empty.touch()
    with h5py.File(other, "w") as file:
        file["x"] = np.ones(3)
    before = {path: path.read_bytes() for path in (text, empty, other)}
    assert "it is not an HDF5 file" in refusal(text, mode)
    assert "it is empty" in refusal(empty, mode)
    assert "not an archive of dunhamfit" in refusal(other, mode)
    assert {path: path.read_bytes() for path in before} == before
    assert sorted(tmp_path.iterdir()) == sorted(before)


def test_missing_file_and_folder(tmp_path):
    assert "there is no such archive" in refusal(tmp_path / "none.h5")
    assert "choose a folder that exists" in refusal(tmp_path / "none" / "a.h5", "a")
    (tmp_path / "folder.h5").mkdir()
    assert "Is a directory" in refusal(tmp_path / "folder.h5")


@pytest.mark.parametrize("mode", ["r", "a"])
def test_cut_short_anywhere(tmp_path, path, rng, mode):
    whole = path.read_bytes()
    short = tmp_path / "short.h5"
    for length in (9, len(whole) - 1, *rng.integers(9, len(whole), 20)):
        short.write_bytes(whole[:length])
        assert "cut short or damaged" in refusal(short, mode)
        assert short.read_bytes() == whole[:length]


def test_a_flipped_bit_is_never_passed_over(tmp_path, path, fit, rng):
    """Whatever byte changes: the run is refused, or it is the run that was stored."""
    whole = path.read_bytes()
    hurt = tmp_path / "hurt.h5"
    refused = 0
    for place in rng.integers(0, len(whole), 150):
        changed = bytearray(whole)
        changed[place] ^= 1 << int(rng.integers(8))
        hurt.write_bytes(changed)
        try:
            with open_archive(hurt) as archive:
                loaded = archive.load(1)
                lines = loaded.lines.position
        except (ArchiveProblem, UsageError) as error:
            assert "\n" not in str(error)
            refused += 1
        else:
            assert np.array_equal(lines, fit.lines.position)
            for name in ("values", "factor"):
                assert np.array_equal(getattr(loaded, name), getattr(fit, name))
    assert refused > 10


def test_newer_format(path):
    with h5py.File(path, "r+") as file:
        file.attrs.create("format_version", 7, dtype="<i8")
        file.attrs["written_by"] = "dunhamfit 3.1"
    whole = path.read_bytes()
    for mode in ("r", "a"):
        assert "format version 7" in refusal(path, mode)
        assert "it needs dunhamfit 3.1 or later" in refusal(path, mode)
    assert path.read_bytes() == whole


def test_lines_that_are_gone_when_they_are_wanted(tmp_path, path):
    with open_archive(path) as archive:
        fit = archive.latest()
    shutil.move(path, tmp_path / "moved.h5")
    with pytest.raises(ArchiveProblem, match="there is no such archive"):
        fit.residuals  # noqa: B018


def test_a_repeat_of_a_stored_fit(path):
    with open_archive(path) as archive:
        stored = archive.latest()
    assert_same_fit(fit_model(stored.model, stored.lines, policy=stored.noise.policy), stored)

"""Files of a run: whole or not at all, exact, and readable by other programs."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from record_examples import CONTEXT, SETTINGS, TEMPERATURE, activated, all_fits, conductivity, hopping_only
from scipy import stats

from gapfit.archive import fit_fingerprint, load_fit, save_fit, write_posterior
from gapfit.errors import FileError
from gapfit.fit import fit_temperature_series
from gapfit.posterior import STUDENT_SCALE
from gapfit.readoff import SERIES_TEXT_COLUMNS, series_from_table
from gapfit.series import make_series
from gapfit.storage import (
    atomic_path,
    file_digest,
    plain,
    read_json,
    run_record,
    series_names,
    write_json,
    write_series,
    write_text,
)
from gapfit.tables import gap_table, gaps_csv, gaps_record
from gapfit.tabular import read_table

# ------------------------------------------------------------------------------------- whole or not at all


def test_failed_writing_leaves_the_old_file(tmp_path: Path) -> None:
    path = write_text(tmp_path / "new" / "a.txt", "old")

    def half_way() -> None:
        with atomic_path(path) as temporary:
            temporary.write_text("half")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        half_way()
    assert path.read_text() == "old"
    assert [item.name for item in path.parent.iterdir()] == ["a.txt"]


def test_temporary_file_stands_in_the_same_folder(tmp_path: Path) -> None:
    with atomic_path(tmp_path / "a.txt") as temporary:
        assert temporary.parent == tmp_path
        temporary.write_text("new")
        assert not (tmp_path / "a.txt").exists()
    assert (tmp_path / "a.txt").read_text() == "new"


def test_new_files_can_be_read_by_others(tmp_path: Path) -> None:
    ordinary = tmp_path / "ordinary"
    ordinary.write_text("")
    assert write_text(tmp_path / "ours", "").stat().st_mode == ordinary.stat().st_mode


def test_folder_that_cannot_be_made_is_told(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(FileError, match="cannot be written"):
        write_text(tmp_path / "file" / "a.txt", "")


def test_json_has_null_for_missing_numbers(tmp_path: Path) -> None:
    content = {
        "a": np.array([1.0, np.nan]),
        "b": Fraction(1, 3),
        "c": Path("x/y"),
        "d": np.float64(0.1),
        "e": True,
    }
    record = read_json(write_json(tmp_path / "a.json", content))
    assert record == {"a": [1.0, None], "b": "1/3", "c": "x/y", "d": 0.1, "e": True}
    with pytest.raises(TypeError, match="object has no place"):
        plain(object())


def test_broken_json_is_told(tmp_path: Path) -> None:
    (tmp_path / "a.json").write_text("{")
    with pytest.raises(FileError, match="no valid JSON"):
        read_json(tmp_path / "a.json")


# -------------------------------------------------------------------------------------- names and readings


def example(filling: str, **record: object):
    return make_series([0.1, 0.2, 0.4], [1.0, 2.0, 3.0], 0.1, filling=Fraction(filling), **record)


def test_names_tell_series_of_one_filling_apart() -> None:
    series = [
        example("1/3", field_T=9.5),
        example("-4/3", field_T=9.5),
        example("2/5", field_T=9.5, contacts="A/1"),
        example("2/5", field_T=12.0, contacts="A/1"),
        example("2/5", field_T=12.0, contacts="B"),
        example("1", drive_current_A=1e-9),
        example("1", drive_current_A=2e-8),
        example("2"),
        example("2"),
    ]
    names = series_names(series)
    assert names[:2] == ["1_3", "minus4_3"]
    assert names[2:5] == ["2_5_9.5T", "2_5_12T_contacts-A-1", "2_5_12T_contacts-B"]
    assert names[5:7] == ["1_1nA", "1_20nA"]
    assert len({name.lower() for name in names}) == len(names)


def test_hostile_names_make_no_paths() -> None:
    names = series_names([example("1", contacts="../../x"), example("1", contacts="a\\b:c")])
    assert not any(set(name) & set("/\\:") for name in names)


def test_readings_are_a_valid_input_again(tmp_path: Path) -> None:
    written = [activated().series, conductivity().series]
    path = write_series(tmp_path / "series.csv", written)
    table = read_table(path, missing="keep", text_columns=SERIES_TEXT_COLUMNS)
    for old, new in zip(written, series_from_table(table), strict=True):
        for name in ("temperature", "value", "error", "temperature_error"):
            np.testing.assert_array_equal(getattr(new, name), getattr(old, name))
        assert (new.filling, new.field_T, new.quantity) == (old.filling, old.field_T, old.quantity)
        assert new.excluded == old.excluded


def test_excluded_readings_carry_their_reason(tmp_path: Path) -> None:
    frame = pd.read_csv(write_series(tmp_path / "series.csv", [activated().series]))
    assert frame.reason.dropna().tolist() == ["sweep ends before the filling"]
    assert frame.rho_xx_ohm[frame.excluded == "yes"].tolist() == [1234.5]


# ---------------------------------------------------------------------------------------------- provenance


def test_digest_is_that_of_the_standard(tmp_path: Path) -> None:
    (tmp_path / "abc").write_bytes(b"abc")
    # FIPS 180-2, appendix B.1
    expected = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert file_digest(tmp_path / "abc") == expected


def test_run_record_names_versions_inputs_and_priors(tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "a.csv").write_bytes(b"abc")
    fits = all_fits()
    record = run_record(
        fits,
        study={"sample": {"name": "x"}},
        inputs=[tmp_path / "data" / "a.csv"],
        folder=tmp_path,
        seed=7,
        wall_time_s=1.5,
    )
    record = json.loads(json.dumps(record))
    assert record["inputs"][0]["file"] == "data/a.csv"
    assert {"gapfit", "python", "numpy", "scipy", "pandas", "emcee"} <= set(record["versions"])
    assert set(record["priors"]) == {"1_3", "2_5", "2_3"}
    assert record["settings"]["rules"]["cut_cost"] == SETTINGS.rules.cut_cost
    assert record["seed"] == 7
    with pytest.raises(FileError, match="cannot be read"):
        run_record(fits, study={}, inputs=[tmp_path / "gone"], folder=tmp_path, seed=0, wall_time_s=0.0)


# --------------------------------------------------------------------------------------------- stored fits


def test_stored_fit_gives_identical_results(tmp_path: Path) -> None:
    for fit in all_fits():
        back = load_fit(save_fit(fit, tmp_path / "fit.npz"))
        assert back.settings == fit.settings
        assert back.flags == fit.flags
        assert back.line == fit.line
        assert back.series.excluded == fit.series.excluded
        np.testing.assert_array_equal(back.gap.draws, fit.gap.draws)
        np.testing.assert_array_equal(back.problem.prior.width, fit.problem.prior.width)
        np.testing.assert_array_equal(back.curves([0.5, 1.0]).total, fit.curves([0.5, 1.0]).total)
        assert gaps_csv(gap_table([back], CONTEXT)) == gaps_csv(gap_table([fit], CONTEXT))
        frame = gap_table([fit], CONTEXT)
        assert json.dumps(gaps_record(frame, [back])) == json.dumps(gaps_record(frame, [fit]))
        assert not back.draws.coordinates.flags.writeable


def test_damaged_or_foreign_files_are_no_fits(tmp_path: Path) -> None:
    path = save_fit(activated(), tmp_path / "fit.npz")
    content = path.read_bytes()
    for damaged in (content[: len(content) // 2], b"", b"no archive"):
        path.write_bytes(damaged)
        with pytest.raises(FileError, match="no stored fit, or damaged"):
            load_fit(path)
    np.savez(path, record=np.array([{"a": 1}], dtype=object))
    with pytest.raises(FileError, match="no stored fit, or damaged"):
        load_fit(path)
    for record in ('{"format_version": 99, "parameters": []}', '{"format_version": 1, "parameters": ["x"]}'):
        np.savez(path, record=np.array(record))
        with pytest.raises(FileError, match="another version"):
            load_fit(path)


def test_fingerprint_changes_with_anything_that_matters() -> None:
    series = activated().series
    value = series.value.copy()
    value[3] = np.nextafter(value[3], np.inf)
    marks = [
        fit_fingerprint(series, SETTINGS),
        fit_fingerprint(replace(series, value=value), SETTINGS),
        fit_fingerprint(replace(series, filling=Fraction(2, 3)), SETTINGS),
        fit_fingerprint(series, replace(SETTINGS, seed=8)),
        fit_fingerprint(series, replace(SETTINGS, combinations=SETTINGS.combinations[:2])),
        fit_fingerprint(series, replace(SETTINGS, rules=replace(SETTINGS.rules, cut_cost=2.0))),
    ]
    assert len(set(marks)) == len(marks)


def test_fingerprint_survives_storing(tmp_path: Path) -> None:
    fit = activated()
    back = load_fit(save_fit(fit, tmp_path / "fit.npz"))
    assert fit_fingerprint(back.series, back.settings) == fit_fingerprint(fit.series, fit.settings)


# ----------------------------------------------------------------------------------------- posterior files


def test_posterior_file_reads_as_draws_of_a_chain(tmp_path: Path) -> None:
    fit = activated()
    path = write_posterior(fit, tmp_path / "posterior" / "1_3.nc")
    with xr.open_dataset(path, group="posterior", engine="h5netcdf") as group:
        assert group.gap_K.dims == ("chain", "draw")
        gap = group.gap_K.values[group.in_regime.values == 1]
        assert float(np.median(gap)) == fit.gap.median
        assert group.gap_K.attrs["units"] == "K"
        assert {"prefactor", "activated", "combination", "scale"} <= set(group.data_vars)
        assert set(np.unique(group.window_low_K)) <= set(fit.series.temperature)
        assert np.isfinite(group.inflation).all()
    with xr.open_dataset(path, group="observed_data", engine="h5netcdf") as group:
        np.testing.assert_array_equal(group.reading, fit.series.value)
    with xr.open_dataset(path, group="constant_data", engine="h5netcdf") as group:
        assert group.combination_name.values.tolist() == [item.name for item in fit.draws.combinations]
        assert float(group.combination_share.sum()) == pytest.approx(1)
    with xr.open_dataset(path, engine="h5netcdf") as file:
        assert file.attrs["filling"] == "1/3"
        assert "exp(-Delta / 2 k_B T)" in file.attrs["convention"]


def test_log_likelihood_is_the_density_of_each_reading(tmp_path: Path) -> None:
    fit = hopping_only()
    path = write_posterior(fit, tmp_path / "2_5.nc")
    with xr.open_dataset(path, group="log_likelihood", engine="h5netcdf") as group:
        written = group.reading.values[0, 17]
    inflation = fit.draws.natural("inflation")[17]
    curve = fit.problem.curve(fit.draws.coordinates[17:18]).total[0]
    sigma = STUDENT_SCALE * inflation * fit.series.error
    np.testing.assert_allclose(written, stats.t.logpdf(fit.series.value, 5, curve, sigma), rtol=1e-10)


def test_log_likelihood_is_that_of_the_fit_up_to_constants(tmp_path: Path) -> None:
    series = replace(activated().series, temperature_error=0.01 * TEMPERATURE)
    for noise in ("student", "gaussian"):
        fit = fit_temperature_series(
            series, replace(SETTINGS, noise=noise, combinations=SETTINGS.combinations[:1])
        )
        path = write_posterior(fit, tmp_path / "a.nc")
        with xr.open_dataset(path, group="log_likelihood", engine="h5netcdf") as group:
            written = group.reading.values[0, :50]
        own = fit.problem.point_terms(fit.draws.coordinates[:50])
        np.testing.assert_allclose(written - written[0], own - own[0], atol=1e-9)


def test_member_weights_are_shares_of_the_draws(tmp_path: Path) -> None:
    fit = activated()
    path = write_posterior(fit, tmp_path / "1_3.nc")
    with xr.open_dataset(path, group="sample_stats", engine="h5netcdf") as group:
        largest = float(group.member_weight.max())
        assert group.lp.dims == ("chain", "draw")
    assert largest == pytest.approx(fit.weights.weight.max())


def test_same_fit_writes_the_same_bytes(tmp_path: Path) -> None:
    first = write_posterior(activated(), tmp_path / "a.nc").read_bytes()
    assert write_posterior(activated(), tmp_path / "b.nc").read_bytes() == first

"""The reduced model's closed forms against the fuller calculations, within the errors that go with them."""

from __future__ import annotations

from dataclasses import replace

import pytest

from reconcile.physics.solvers import errors


@pytest.fixture(scope="module")
def rows():
    return errors.computed_rows()


@pytest.mark.parametrize("index", range(len(errors.CHECKS)), ids=[check.formula for check in errors.CHECKS])
def test_each_formula_stays_within_its_stated_error(rows, index):
    row = rows[index]
    assert 0.0 < row.largest <= row.bound


def test_bounds_are_not_far_above_what_is_found(rows):
    # a bound ten times as wide as the error would let a broken coefficient pass
    assert [row.formula for row in rows if row.bound > 5 * row.largest] == []


def test_the_table_that_is_kept_is_the_one_computed(rows):
    kept = errors.stated_rows()
    assert [replace(row, largest=0.0) for row in kept] == [replace(row, largest=0.0) for row in rows]
    for stated, computed in zip(kept, rows, strict=True):
        # two digits are kept, and rounding elsewhere may shift the last of them; the top of the gain over wavelength is so
        # flat that the wavelength itself is found to 1 % only
        flat = 0.01 if stated.formula == "fragments.median_diameter" else 0.0
        assert stated.largest == pytest.approx(computed.largest, abs=flat, rel=0.06), stated.formula


def test_the_table_is_read_back_as_it_is_written(rows, tmp_path):
    kept = errors.stated_rows()
    assert errors.toml_text(kept).count("[[row]]") == len(rows)
    assert "\r" not in errors.toml_text(kept)
    assert errors.toml_text(kept).isascii()  # a console of any code page writes it alike


@pytest.mark.parametrize(
    ("pressure", "error"), [(3e9, 0.001), (10e9, 0.002), (30e9, 0.007), (60e9, 0.012), (100e9, 0.017), (300e9, 0.035)]
)
def test_contact_velocity_of_a_release(pressure, error):
    # each error is stated to 0.1 %, with its sign
    assert errors.velocity_error(pressure) == pytest.approx(error, abs=6e-4)


def test_a_wrong_coefficient_is_found(monkeypatch):
    # the checks do see the formulas: 2 % off in each is beyond each bound
    for name in ("drag_time", "contact_velocity"):
        right = getattr(errors.contact, name)
        with monkeypatch.context() as patched:
            patched.setattr(errors.contact, name, lambda *given, right=right: 1.02 * right(*given))
            found = errors.drag_error(500.0) if name == "drag_time" else errors.velocity_error(30e9)
        assert abs(found) > (0.003 if name == "drag_time" else 0.018)

"""The radiation field drawn, summed up and handed to xarray; the field itself is invented."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from levelnet.atomic.levels import hydrogenic_levels
from levelnet.cli.main import main
from levelnet.cli.output import summary_text
from levelnet.errors import InputError
from levelnet.history.result import History, RadiationField
from levelnet.report.figures import FIGURE_NAMES, figure_paths, make_figures, save_figures
from levelnet.report.spectrum import draw_spectrum, spectrum_figure
from levelnet.report.style import house_style, render
from levelnet.store import write
from tests.invented_history import invented_field, invented_history

LYMAN_ALPHA_EV = 10.1988  # from memory; vacuum wavelength 1215.67 Angstrom


@pytest.fixture(scope="module")
def field() -> RadiationField:
    return invented_field()


@pytest.fixture(scope="module")
def history(field: RadiationField) -> History:
    return invented_history(field=field)


def new_axes() -> Axes:
    return Figure().subplots()


def curves(axes: Axes) -> dict[str, np.ndarray]:
    """Drawn spectra by their label, each of shape (2, n)."""
    return {
        str(one.get_label()): np.array(one.get_data())
        for one in axes.get_lines()
        if not str(one.get_label()).startswith("_")
    }


# ---- drawing


def test_whole_range_is_log10_of_the_distortion(field: RadiationField) -> None:
    axes = new_axes()
    draw_spectrum(axes, field, (1000.0, 600.0))
    drawn = curves(axes)
    assert list(drawn) == ["$z$ = 1000", "$z$ = 600"]
    for row, (energy, values) in zip((2, 4), drawn.values(), strict=True):
        np.testing.assert_array_equal(energy, field.photon_energy_ev)
        np.testing.assert_allclose(10.0**values, np.exp(field.log_distortion[row]), rtol=1e-12)
    assert axes.get_xlim() == (field.photon_energy_ev[0], field.photon_energy_ev[-1])


def test_wings_are_drawn_over_the_distance_in_frequency(field: RadiationField) -> None:
    axes = new_axes()
    draw_spectrum(axes, field, (800.0,), around_ev=LYMAN_ALPHA_EV)
    ((offset, values),) = curves(axes).values()
    assert axes.get_xlim() == (-0.01, 0.01)
    # To the edges of the frame, and no further than the next point.
    assert -0.0106 < offset[0] <= -0.01 < offset[1]
    assert offset[-2] < 0.01 <= offset[-1] < 0.0106
    expected = np.interp(
        LYMAN_ALPHA_EV * (1.0 + offset), field.photon_energy_ev, field.log_distortion[3]
    )
    middle = int(np.argmin(np.abs(field.photon_energy_ev - LYMAN_ALPHA_EV)))
    ratio = np.exp(expected - field.log_distortion[3, middle])
    np.testing.assert_allclose(values, ratio, rtol=1e-9)


def test_narrow_view_between_two_points_still_has_its_curve() -> None:
    coarse = RadiationField(
        np.array([900.0]), np.array([5.0, 9.0, 13.6]), np.array([[1.0, 2.0, 3.0]])
    )
    axes = new_axes()
    draw_spectrum(axes, coarse, around_ev=LYMAN_ALPHA_EV)
    ((offset, values),) = curves(axes).values()
    assert offset[0] < -0.01 < 0.01 < offset[-1]
    np.testing.assert_allclose(values, np.exp([0.0, 1.0]))


def test_nearest_spectra_are_drawn_each_once(field: RadiationField) -> None:
    axes = new_axes()
    draw_spectrum(axes, field, (620.0, 1180.0, 1210.0))
    assert list(curves(axes)) == ["$z$ = 1200", "$z$ = 600"]


def test_five_of_many_spectra_are_drawn_while_hydrogen_recombines() -> None:
    many = tuple(float(z) for z in np.linspace(1600.0, 400.0, 121))
    axes = new_axes()
    draw_spectrum(axes, invented_field(many, 2e-2))
    assert [float(name.split("=")[1]) for name in curves(axes)] == [1500, 1300, 1100, 900, 700]


@pytest.mark.parametrize(
    ("options", "reason"),
    [
        ({"redshifts": (500.0,)}, "redshift = 500: the spectra run from 600 to 1400"),
        ({"redshifts": (float("nan"),)}, "redshift = nan: the spectra run"),
        ({"redshifts": ()}, "0 given, allowed are 1 to 7"),
        ({"redshifts": (1000.0,) * 8}, "8 given, allowed are 1 to 7"),
        ({"around_ev": 3.0}, r"around_ev = 3: the field reaches from 5\.\d+ to 13\.\d+"),
        ({"around_ev": float("nan")}, "around_ev = nan"),
        ({"around_ev": 10.2, "half_width": 0.0}, "half_width = 0: must be above 0 and below 1"),
    ],
)
def test_what_cannot_be_drawn_is_one_line(
    options: dict, reason: str, field: RadiationField
) -> None:
    with pytest.raises(InputError, match=reason):
        draw_spectrum(new_axes(), field, **options)


def test_empty_fields_cannot_be_drawn() -> None:
    nothing = RadiationField(np.zeros(0), np.array([5.0, 13.0]), np.zeros((0, 2)))
    with pytest.raises(InputError, match="holds no spectra"):
        draw_spectrum(new_axes(), nothing)
    point = RadiationField(np.array([900.0]), np.array([10.0]), np.zeros((1, 1)))
    with pytest.raises(InputError, match="at 1 photon energies"):
        draw_spectrum(new_axes(), point)
    with pytest.raises(InputError, match="holds no radiation field"):
        spectrum_figure(invented_history())


# ---- the figure


def test_lines_are_marked_at_their_energies(history: History) -> None:
    left, right = spectrum_figure(history).axes
    marks = {one.get_text(): one.xy[0] for one in left.texts if one.get_text()}
    assert list(marks) == [r"Ly $\alpha$", r"$\beta$", r"$\gamma$", r"$\delta$", "limit"]
    # Vacuum wavelengths in Angstrom and hc = 12398.42 eV Angstrom, all from memory.
    wavelengths = np.array([1215.67, 1025.72, 972.54, 949.74, 911.75])
    np.testing.assert_allclose(list(marks.values()), 12398.42 / wavelengths, rtol=1e-5)
    # The close view is centred on the first of them.
    (offset, _), *_ = curves(right).values()
    energy = history.field.photon_energy_ev if history.field else np.zeros(0)
    nearest = energy[np.argmin(np.abs(energy - marks[r"Ly $\alpha$"]))]
    assert np.min(np.abs(offset - (nearest / marks[r"Ly $\alpha$"] - 1.0))) < 1e-12


def test_close_view_shows_the_height_of_the_wings_alone(field: RadiationField) -> None:
    """Its height fits what lies within it: what is far away is not drawn there."""
    axes = new_axes()
    draw_spectrum(axes, field, (600.0,), around_ev=LYMAN_ALPHA_EV)
    ((_, values),) = curves(axes).values()
    assert values.min() > 0.01


@pytest.mark.parametrize("n_max", [2, 40])
def test_figure_of_any_atom_keeps_its_text_inside(n_max: int, history: History) -> None:
    levels = hydrogenic_levels(n_max, "measured", resolve_l_to=min(n_max, 12))
    values = np.ones((len(history.redshift), len(levels)))
    species = replace(history.species[0], levels=levels, population=values, log_departure=values)
    figure = spectrum_figure(replace(history, species=(species,)))
    with house_style():
        figure.draw_without_rendering()
        for axes in figure.axes:
            box = axes.get_tightbbox()
            assert box is not None
            assert -1.0 <= box.x0 <= box.x1 <= figure.bbox.width + 1.0
            assert -1.0 <= box.y0 <= box.y1 <= figure.bbox.height + 1.0


def test_figures_of_a_history_with_the_field(history: History, tmp_path: Path) -> None:
    assert tuple(make_figures(history)) == (*FIGURE_NAMES, "spectrum")
    assert tuple(make_figures(invented_history())) == FIGURE_NAMES
    (tmp_path / "spectrum.svg").write_text("mine")
    with pytest.raises(InputError, match=r"spectrum\.svg: exists already"):
        save_figures(history, tmp_path)
    written = save_figures(history, tmp_path, force=True)
    assert written == figure_paths(tmp_path, with_field=True)
    assert b"<image" not in (tmp_path / "spectrum.svg").read_bytes()  # curves, not pixels
    assert render(spectrum_figure(history), "svg") == (tmp_path / "spectrum.svg").read_bytes()


# ---- summary and xarray


def test_summary_says_that_the_field_is_there(history: History) -> None:
    text = summary_text(history)
    assert (
        "spectra of the field  5, z = 1400 to 600, 5.10 to 13.60 eV (1963 photon energies)" in text
    )
    assert "frequency step        5.00e-02 in ln nu, relative error of x_e from it 3.7e-05" in text
    assert "photon number error   2.1e-13" in text
    assert "atom number error     4.4e-14" in text


def test_summary_without_the_field_says_nothing_of_it() -> None:
    text = summary_text(invented_history())
    for word in ("spectra", "frequency step", "photon number", "atom number"):
        assert word not in text


def test_show_of_a_file_with_the_field(
    history: History,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.chdir(tmp_path)
    # The test above draws them in earnest; here it is asked which are written, and where.
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: kind.encode())
    write(history, "with.h5")
    write(invented_history(), "without.h5")
    assert main(["show", "with.h5", "--json", "--plot", "figures"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["field"]["n_spectra"] == 5
    assert values["field"]["redshift_range"] == [1400.0, 600.0]
    assert values["diagnostics"]["photon_number_error"] == 2.1e-13
    assert "figures/spectrum.pdf" in values["written"]
    assert (tmp_path / "figures" / "spectrum.pdf").read_bytes() == b"pdf"
    assert main(["show", "without.h5", "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["field"] is None
    assert values["diagnostics"]["frequency_step"] == 0.0


def test_field_as_xarray(field: RadiationField) -> None:
    data = field.to_xarray()
    assert dict(data.sizes) == {"redshift": 5, "photon_energy_ev": len(field.photon_energy_ev)}
    one = data["log_distortion"].sel(redshift=800.0)
    np.testing.assert_array_equal(one.to_numpy(), field.log_distortion[3])
    np.testing.assert_array_equal(data["photon_energy_ev"].to_numpy(), field.photon_energy_ev)


@pytest.mark.parametrize(
    ("redshift", "energy"), [((800.0, 900.0), (5.0, 6.0)), ((900.0, 800.0), (6.0, 5.0))]
)
def test_field_out_of_order_is_no_field(redshift: tuple, energy: tuple) -> None:
    with pytest.raises(ValueError, match="redshift must descend, photon_energy_ev ascend"):
        RadiationField(np.array(redshift), np.array(energy), np.zeros((2, 2)))

"""Laws of the report on nonlinear measurements: rays in their true places, the recomputed misfit beside."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from numpy.testing import assert_allclose

from stillground.errors import ResultError
from stillground.products.report import page as page_module
from stillground.products.report import write_comparison, write_report
from stillground.protocols import Result

from .made_up_folders import write_folder
from .made_up_results import SURFACE, bent, bent_rays


def written(result: Result, folder: Path) -> str:
    return write_report(write_folder(folder, {"toe": result}, surface=SURFACE)).read_text(encoding="utf-8")


def static_rays(page: str) -> list[np.ndarray]:
    """The rays of the static picture as (share of its width, share of its height)."""
    (path,) = re.findall(r'<path class="rays" d="([^"]+)" data-box="([^"]+)"', page)
    left, top, width, height = map(float, path[1].split())
    found = []
    for line in path[0].split("M")[1:]:
        start, steps = line.split("l")
        corners = np.cumsum(np.array(f"{start} {steps}".split(), float).reshape(-1, 2), axis=0)
        found.append((corners - [left, top]) / [width, height])
    return found


@pytest.fixture(scope="module")
def coarse(make: Callable[..., Result]) -> Result:
    return make(argued=False, spacing=0.5)


@pytest.fixture(scope="module")
def page(coarse: Result, tmp_path_factory: pytest.TempPathFactory) -> str:
    return written(bent(coarse), tmp_path_factory.mktemp("bent"))


def test_static_rays_go_where_the_rays_went(page: str, coarse: Result) -> None:
    drawn = static_rays(page)
    rays = [ray for ray in bent_rays() if len(ray)][::2]
    assert len(drawn) == len(rays) == 312
    (x0, x1), (z0, z1) = ((axis[0], axis[-1]) for axis in coarse.axes)
    for shares, ray in zip(drawn, rays, strict=True):
        found = np.column_stack([x0 + shares[:, 0] * (x1 - x0), z1 - shares[:, 1] * (z1 - z0)])
        ends = ray[[0, -1]]
        # A tenth of a pixel is 7 mm here.
        assert_allclose(found[[0, -1]], ends, atol=0.01)
        straight = np.interp(found[:, 0], ray[:, 0], ray[:, 1])
        assert_allclose(found[:, 1], straight, atol=0.02)


def test_rays_have_a_switch_and_words(page: str) -> None:
    assert 'data-part="rays" checked> Rays of the answer</label>' in page
    assert "Faint lines: 312 of 625 rays through the answer at the chosen pick." in page


def test_the_misfit_recomputed_is_told_beside_the_linear_one(page: str, coarse: Result) -> None:
    linear = coarse.chosen.chi_square
    assert f'<td class="n">{linear:.3g} <small>(1.27)</small></td>' in page
    assert page.count("<small>(") == 1, "of the chosen rule alone"
    more = 100 * (1.27 / linear - 1)
    assert (
        "All misfits here are of the last linearisation, along rays held still. Recomputed with rays traced "
        f"through the answer (in brackets), that of gcv is 1.27 instead of {linear:#.3g}: "
        f"{abs(more):.2g} % {'more' if more > 0 else 'less'}." in page
    )
    assert f"<dd>{linear:#.3g}<small> recomputed 1.27</small></dd>" in page


@pytest.mark.parametrize(
    ("factor", "said"), [(1.3, "30 % more"), (0.8, "20 % less"), (1.001, "as good as the same")]
)
def test_how_far_the_misfits_differ_is_said(coarse: Result, factor: float, said: str, tmp_path: Path) -> None:
    one = bent(coarse, factor * coarse.chosen.chi_square)
    text = written(replace(one, rays=()), tmp_path)
    assert f": {said}." in text
    assert "of the last linearisation. Recomputed (in brackets), that of gcv" in text, "no word of rays"


def test_how_far_other_starts_move_the_answer_is_said_under_the_rules(page: str) -> None:
    rules = page.split('class="rules"')[1].split("</section>")[0]
    assert (
        "From another start the answer moves by 15 % (a quarter slower), 206 % (half as steep); "
        "on a coarse grid." in rules
    )


def test_results_without_rays_and_recomputed_numbers_show_nothing(coarse: Result, tmp_path: Path) -> None:
    text = written(coarse, tmp_path)
    assert 'class="rays"' not in text
    assert 'data-part="rays"' not in text
    for word in ("Faint lines", "ecomputed", "<small>(", "another start"):
        assert word not in text


def test_rays_count_in_the_budget_of_the_page(
    coarse: Result, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    room = len(written(coarse, tmp_path)) + 60_000
    monkeypatch.setattr(page_module, "MOST_BYTES", room)
    told = "To keep this page small"
    assert told not in written(coarse, tmp_path)
    assert told in written(bent(coarse), tmp_path), "pictures give way to rays"


def test_a_comparison_tells_both_misfits_of_both(coarse: Result, tmp_path: Path) -> None:
    folders = [
        write_folder(tmp_path / name, {"toe": one}, surface=SURFACE)
        for name, one in (("bent", bent(coarse)), ("straight", coarse))
    ]
    text = write_comparison(*folders, tmp_path).read_text(encoding="utf-8")
    assert text.count("recomputed 1.27") == 1
    linear = f"{coarse.chosen.chi_square:.3g}"
    told = f"<td>1.27 <small>({linear} on its last linearisation)</small></td><td>{linear}</td>"
    assert f'<tr><th scope="row">misfit</th>{told}</tr>' in text


def on_the_surface(folder: Path, gap: bool = False) -> None:
    """Moves sources and receivers of a folder's fit table to a line on the surface."""
    path = folder / "toe_fit.csv"
    fit = pd.read_csv(path)
    for name, first in (("source", 0.0), ("receiver", 0.3)):
        along = first + 0.7 * (fit[name] - 1)
        fit[f"{name}_distance [m]"] = along
        fit[f"{name}_elevation [m]"] = np.interp(along, *SURFACE)
        # Numbers need not be without gaps, where somebody took rows out.
        fit[name] = fit[name] * (2 if gap else 1)
    fit.to_csv(path, index=False)


def test_a_line_on_the_surface_has_a_curve_for_each_source(coarse: Result, tmp_path: Path) -> None:
    folder = write_folder(tmp_path, {"toe": bent(coarse)}, surface=SURFACE)
    caption = "Time against distance, a curve for each source (stars): dots observed, lines predicted"
    assert caption not in write_report(folder).read_text(encoding="utf-8"), "boreholes have none"
    for gap in (False, True):
        on_the_surface(folder, gap)
        text = write_report(folder).read_text(encoding="utf-8")
        assert f"{caption}; ringed: count less than half</figcaption>" in text
        (chart,) = re.findall(rf'aria-label="{re.escape(caption)}[^>]*>(.*?)</svg>', text)
        (dots,) = re.findall(r'class="dots observed" d="([^"]+)"', chart)
        places = np.array([one.split("h")[0].split() for one in dots.split("M")[1:]], float)
        assert len(places) == 625
        # Straight lines through the numbers of receivers and the times: axes are linear.
        fit = pd.read_csv(folder / "toe_fit.csv")
        for pixels, column in zip(places.T, ("receiver_distance [m]", "observed_time [ms]"), strict=True):
            assert np.abs(np.corrcoef(pixels, fit[column])[0, 1]) > 1 - 1e-5
        # Two branches each, but where no receiver stands left of the first source.
        assert chart.count('class="curve faint"') == 49
        (rings,) = re.findall(r'class="dots dot" d="([^"]+)"', chart)
        assert rings.count("M") == np.sum(fit["weight"] < 0.5) == 2


def test_curves_of_anything_but_sources_are_told_by_their_own_name_and_sign(
    coarse: Result, tmp_path: Path
) -> None:
    folder = write_folder(tmp_path, {"toe": bent(coarse)}, surface=SURFACE)
    on_the_surface(folder)
    path = folder / "toe_fit.csv"
    fit = pd.read_csv(path)
    fit.rename(columns=lambda name: re.sub("^source", "station", name)).to_csv(path, index=False)
    text = write_report(folder).read_text(encoding="utf-8")
    caption = "Time against distance, a curve for each station (triangles): dots observed, lines predicted"
    (chart,) = re.findall(rf'aria-label="{re.escape(caption)}[^>]*>(.*?)</svg>', text)
    assert 'class="place-triangle"' in chart
    assert 'class="place-star"' not in chart


def test_a_history_that_lost_its_rays_is_refused(coarse: Result, tmp_path: Path) -> None:
    folder = write_folder(tmp_path, {"toe": bent(coarse)}, surface=SURFACE)
    path = folder / "toe_history.nc"
    history = xr.load_dataset(path).drop_vars("ray_elevation")
    history.to_netcdf(path)
    with pytest.raises(ResultError, match=r"toe_history\.nc: holds no 'ray_elevation'"):
        write_report(folder)

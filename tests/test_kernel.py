"""Laws of given kernels: their operator, their tables, and what is said of tables that cannot be used."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import quad

from kernel_tables import CONFIG, integration, write_data, write_kernels, write_survey
from stillground.config import load
from stillground.errors import ConfigError, GridError, StillgroundError
from stillground.grid import Grid
from stillground.ground import Blob, Box, Ground, Layer
from stillground.operators.kernel_integrals import KernelIntegrals
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.profiles import Profile, read_profiles
from stillground.pipeline.rehearse import Rehearsed, rehearse_all
from stillground.pipeline.run import run_config
from stillground.pipeline.simulate import simulate
from stillground.quadrature import RULES
from stillground.survey import read


def placed(path: Path, *overrides: str) -> tuple[Profile, tuple[Grid, ...]]:
    config, _ = load(path, overrides)
    (profile,) = read_profiles(config)
    return profile, plan_grids(profile, config)


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """Integration to seven places over 65 nodes."""
    nodes, ends, kernels = integration(65, 8)
    return write_survey(tmp_path, nodes, kernels, np.sin(ends), 0.01)


@pytest.mark.parametrize("rule", RULES)
def test_the_adjoint_is_the_transpose(rule: str) -> None:
    grid = Grid((0.0, -1.0), (0.5, 0.25), (RULES[rule].n_nodes(2), RULES[rule].n_nodes(4)), RULES[rule])
    operator = KernelIntegrals(grid, np.random.default_rng(0).normal(size=(5, grid.n_nodes)))
    forward, adjoint = operator.matmat(np.eye(grid.n_nodes)), operator.rmatmat(np.eye(5))
    assert_allclose(adjoint, forward.T, rtol=0, atol=1e-12)
    assert_allclose(operator.rows(np.array([3, 1])).todense(), forward[[3, 1]], rtol=0, atol=1e-12)


def test_kernels_that_do_not_fit_the_grid_are_refused() -> None:
    with pytest.raises(GridError, match=r"kernels of shape \(n_data, 3\) are needed; got \(2, 4\)"):
        KernelIntegrals(Grid((0.0,), (1.0,), (3,)), np.ones((2, 4)))


@pytest.mark.parametrize(("rule", "order"), [("trapezoid", 2), ("simpson", 4), ("gauss-2", 2)])
def test_integrals_of_smooth_kernels_have_the_order_of_the_rule(
    rule: str, order: int, tmp_path: Path
) -> None:
    # Davis & Rabinowitz (1984). Kernels are linear between nodes of the table, so Gauss' have order 2 too.
    # Outside value: scipy.integrate.quad.
    nodes = np.linspace(0, 1, 65)
    rates = np.array([0.5, 1.0, 2.0])
    path = write_survey(tmp_path, nodes, np.exp(-rates[:, None] * nodes), rates, 0.01)
    profile, _ = placed(path, f"physics.quadrature={rule}")
    exact = np.array(
        [quad(lambda x, rate=rate: np.exp(-rate * x) * np.sin(3 * x), 0, 1)[0] for rate in rates]
    )
    errors = []
    # On the finest grid and the next, but for Gauss' rules, where kernels are looked up in ever finer tables.
    for every in (2, 1):
        coarse = write_survey(tmp_path, nodes[::every], np.exp(-rates[:, None] * nodes[::every]), rates, 0.01)
        profile, grids = placed(coarse, f"physics.quadrature={rule}")
        found = profile.scene.assemble(grids[-1]).operator @ np.sin(3 * grids[-1].axes[0])
        errors.append(np.abs(found - exact).max())
    assert np.log2(errors[0] / errors[1]) == pytest.approx(order, abs=0.1)


def test_coarser_rungs_take_every_second_node(path: Path) -> None:
    profile, grids = placed(path)
    assert [grid.shape for grid in grids] == [(17,), (33,), (65,)]
    table = np.loadtxt(path.parent / "kernel.csv", delimiter=",", skiprows=1)
    for grid, step in zip(grids, (4, 2, 1), strict=True):
        dense = profile.scene.assemble(grid).operator.todense()
        assert_allclose(dense, table[:, ::step] * grid.weights(), atol=1e-14)


def test_rows_that_are_switched_off_take_their_kernels_along(path: Path) -> None:
    data = path.parent / "data.csv"
    lines = data.read_text().splitlines()
    lines = [line + (",use" if i == 0 else f",{int(i not in (2, 5))}") for i, line in enumerate(lines)]
    data.write_text("# a comment\n" + "\n\n".join(lines))
    profile, grids = placed(path)
    table = np.loadtxt(path.parent / "kernel.csv", delimiter=",", skiprows=1)
    dense = profile.scene.assemble(grids[-1]).operator.todense()
    assert_allclose(dense, table[[0, 2, 3, 5, 6]] * grids[-1].weights(), atol=1e-14)


def test_lines_of_a_table_take_their_own_kernels(path: Path) -> None:
    data = path.parent / "data.csv"
    lines = data.read_text().splitlines()
    data.write_text("\n".join(f"{line},{'line' if i == 0 else 'ab'[i % 2]}" for i, line in enumerate(lines)))
    config, _ = load(path)
    one, other = read_profiles(config)
    assert (one.name, other.name) == ("data-b", "data-a")
    table = np.loadtxt(path.parent / "kernel.csv", delimiter=",", skiprows=1)
    grid = one.scene.grid
    assert grid is not None
    assert_allclose(other.scene.assemble(grid).operator.todense(), table[1::2] * grid.weights(), atol=1e-14)


def test_netcdf_in_any_order_and_unit_is_the_same_table(path: Path) -> None:
    table = np.loadtxt(path.parent / "kernel.csv", delimiter=",", skiprows=1)
    ds = xr.Dataset(
        {"kernel": (("elevation", "datum"), table.T[::-1], {"property": "porosity", "property_units": "%"})},
        {"elevation": ("elevation", np.linspace(0, 100, 65)[::-1], {"units": "cm"})},
    )
    ds.kernel.attrs["data_units"] = "mS/m"
    ds.to_netcdf(path.parent / "kernel.nc")
    csv, grids = placed(path)
    netcdf, same = placed(path, "physics.kernel=kernel.nc")
    assert_allclose(same[-1].axes[0], grids[-1].axes[0], atol=1e-15)
    assert_allclose(
        netcdf.scene.assemble(same[0]).operator.todense(),
        csv.scene.assemble(grids[0]).operator.todense(),
        atol=1e-15,
    )
    kind = load(path, ["physics.kernel=kernel.nc"])[0].kind
    assert (kind.ground_property.name, kind.ground_property.units, kind.datum_units) == (
        "porosity",
        "%",
        "mS/m",
    )


def section(folder: Path) -> Path:
    """Kernels over a section: Gaussians about a few places."""
    x, z = np.linspace(0, 8, 17), np.linspace(-4, 0, 9)
    centres = [(2.0, -1.0), (4.0, -2.0), (6.0, -1.0), (4.0, -1.0)]
    kernels = [np.exp(-((x[:, None] - a) ** 2) - (z - b) ** 2) for a, b in centres]
    xr.Dataset(
        {"kernel": (("datum", "distance", "elevation"), np.array(kernels))}, {"distance": x, "elevation": z}
    ).to_netcdf(folder / "kernel.nc")
    write_data(folder / "data.csv", np.array([1.0, 2.0, 1.5, 2.2]), 0.1)
    (folder / "kernel.toml").write_text(CONFIG.replace("kernel.csv", "kernel.nc").replace("0.1 m", "2 m"))
    return folder / "kernel.toml"


@pytest.mark.parametrize("rule", ["trapezoid", "simpson"])
def test_sections_take_kernels_along_both_axes(rule: str, tmp_path: Path) -> None:
    overrides = [f"physics.quadrature={rule}", "refinement.levels=2"]
    (result,) = run_config(section(tmp_path), out=tmp_path / "out", overrides=overrides)
    assert dict(result.picture["property"].sizes) == {"elevation": 9, "distance": 17}
    assert result.arrays.ladder.rungs[0].model.shape == (9, 5)


def test_gauss_points_are_for_columns(tmp_path: Path) -> None:
    with pytest.raises(StillgroundError, match=r"'gauss-2' is for kernels along elevation alone.*'simpson'"):
        placed(section(tmp_path), "physics.quadrature=gauss-2", "refinement.levels=2")


def test_the_sensitivity_is_that_of_the_kernels(path: Path) -> None:
    profile, grids = placed(path)
    seen = profile.scene.coverage(grids[-1], (1e-3,)).values
    # Node by node: the root of how many data see it, all of them at 0 and none beyond the last.
    assert seen[0] == seen.max() == 1.0
    assert_allclose(seen[4] ** 2 * 7, 7, rtol=1e-6)
    assert_allclose(seen[20] ** 2 * 7, 5, rtol=1e-6)
    assert seen[-1] == 0.0


@pytest.mark.parametrize(
    "body",
    [
        Blob(0.7, (0.43,), (0.11,)),
        Box(-0.4, (0.311,), (0.5,)),
        Layer(0.3, -np.inf, 0.62),
    ],
    ids=["blob", "box", "layer"],
)
def test_data_of_a_described_ground_are_its_integrals(path: Path, body: Blob | Box | Layer) -> None:
    # Kernels of the table are 1 below their end and fall to 0 over the two intervals about it; outside value:
    # scipy.integrate.quad against numpy.interp of the table.
    profile, _ = placed(path)
    ground = Ground(1.5, (body,))
    table = np.loadtxt(path.parent / "kernel.csv", delimiter=",", skiprows=1)
    nodes = np.linspace(0, 1, 65)

    def integrand(x: float, kernel: np.ndarray) -> float:
        return float(np.interp(x, nodes, kernel) * ground.values(np.array([[x]]))[0])

    cuts = [0.311, 0.5, 0.62]
    exact = [quad(integrand, 0, 1, args=(k,), points=[*cuts, e], limit=400)[0]
             for k, e in zip(table, nodes[8:-1:8], strict=True)]  # fmt: skip
    assert_allclose(profile.scene.predict(ground), exact, atol=3e-4)


def test_simulate_writes_a_table_that_run_reads(path: Path) -> None:
    described = """
[simulate]
output = "made.csv"
noise = "0.01"
background = "1.5"
[[simulate.blob]]
centre = { elevation = "0.4 m" }
radii = "0.1 m"
value = "2"
"""
    path.write_text(path.read_text() + described)
    written, n_data = simulate(load(path)[0])
    assert n_data == 7
    made = read(written, expected=("value", "value_error"))
    ground = Ground(1.5, (Blob(0.5, (0.4,), (0.1,)),))
    clean = placed(path)[0].scene.predict(ground)
    noise = 0.01 * np.random.default_rng(0).standard_normal(7)
    assert_allclose(made["value"], clean + noise, rtol=1e-8)
    (result,) = run_config(
        path, out=path.parent / "out", overrides=['survey.files=["made.csv"]', "errors.floor=0.01"]
    )
    assert len(result.fit) == 7


def test_rehearsals_run_on_nodes_that_are_not_nested(path: Path) -> None:
    config, text = load(path, ["physics.quadrature=gauss-2", "rehearsal.twins=2"])
    folder = path.parent / "out"
    events = rehearse_all(config, text, folder, command="", pattern=False)
    (found,) = (event for event in events if isinstance(event, Rehearsed))
    assert found.rehearsal.total_error.shape == (64,)
    assert np.isfinite(found.rehearsal.total_error).all()


def test_a_background_that_no_kernel_sees_stays_zero(tmp_path: Path) -> None:
    nodes = np.linspace(0, 1, 33)
    kernels = np.array([np.sin(2 * np.pi * k * nodes) for k in range(1, 9)])
    path = write_survey(tmp_path, nodes, kernels, 1 / np.arange(1.0, 9.0), 0.1)
    profile, _ = placed(path)
    assert any("ground.background is taken as 0" in doubt for doubt in profile.scene.doubts)
    (result,) = run_config(path, out=tmp_path / "out")
    assert_allclose(result.arrays.background, 0.0, atol=1e-12)
    assert result.arrays.model.min() < 0, "of a property that may be anything"
    assert not any("negative" in remark for remark in result.arrays.remarks)


Spoil = Callable[[Path, np.ndarray, np.ndarray], None]


def header(text: str) -> Spoil:
    def spoil(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
        lines = (folder / "kernel.csv").read_text().splitlines()
        (folder / "kernel.csv").write_text("\n".join([text + lines[0][lines[0].index(",") :], *lines[1:]]))

    return spoil


def cell(text: str) -> Spoil:
    def spoil(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
        lines = (folder / "kernel.csv").read_text().splitlines()
        lines[3] = text + lines[3][lines[3].index(",") :]
        (folder / "kernel.csv").write_text("\n".join(lines))

    return spoil


def with_(
    nodes_of: Callable[[np.ndarray], np.ndarray], kernels_of: Callable[[np.ndarray], np.ndarray]
) -> Spoil:
    def spoil(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
        write_kernels(folder / "kernel.csv", nodes_of(nodes), kernels_of(kernels))

    return spoil


def netcdf(**variables: object) -> Spoil:
    def spoil(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
        xr.Dataset(variables).to_netcdf(folder / "kernel.csv")

    return spoil


def units(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
    data = folder / "data.csv"
    data.write_text(data.read_text().replace("value,", "value [mS/m],", 1))


def nothing(folder: Path, nodes: np.ndarray, kernels: np.ndarray) -> None:
    pass


same = np.asarray


@pytest.mark.parametrize(
    ("spoil", "overrides", "message"),
    [
        (lambda f, n, k: (f / "kernel.csv").unlink(), [], r"kernel.csv: there is .*; mend physics.kernel"),
        (with_(same, lambda k: k[:5]), [], r"kernel.csv: it has 5 kernels, and .*data.csv has 7 data"),
        (with_(lambda n: n**2, same), [], r"kernel.csv: nodes along elevation must be evenly spaced, 0.0156"),
        (with_(lambda n: n[:2], lambda k: k[:, :2]), [], r"elevation needs 3 nodes or more at finite places"),
        (with_(same, lambda k: k[:0]), [], r"kernel.csv: it has no kernel"),
        (header("depth"), [], r"the header must hold the elevations of the nodes, m, .* 'depth'"),
        (cell("nan"), [], r"kernel.csv: kernels must be finite: row 4"),
        (cell(""), [], r"kernel.csv: kernels must be finite: row 4"),
        (cell("much"), [], r"kernel.csv: kernels must be numbers: row 4 \('much' under 0\)"),
        (cell("1,1"), [], r"every row needs 65 cells like the header: row 4 \(66 cells\)"),
        (netcdf(other=("x", [1.0])), [], r"needs a variable kernel\(datum, elevation\) or .*; it has other"),
        (netcdf(kernel=(("datum", "depth"), np.ones((7, 9)))), [], r"it has kernel\(datum, depth\)"),
        (netcdf(kernel=(("datum", "elevation"), np.ones((7, 9)))), [], r"coordinate elevation is missing"),
        (netcdf(kernel=(("datum", "elevation"), np.full((7, 3), "a"))), [], r"kernel must hold numbers"),
        (
            netcdf(kernel=(("datum", "elevation"), np.ones((7, 9)), {"property": "crs"})),
            [],
            r"attributes of kernel: 'crs' cannot name a variable",
        ),
        (units, [], r"column value is in 'mS/m', but the kernels make data in '1': physics.data_units must"),
        (lambda f, n, k: (f / "k.nc").write_bytes(b"\x89HDF junk"), ["physics.kernel=k.nc"], "file again"),
        (nothing, ["physics.kernel=ground.csv"], r"ground.csv: there is no such file"),
        (nothing, ["physics.property=elevation"], r"physics.property: 'elevation' cannot name a variable"),
        (nothing, ["physics.units=furlong per"], r"physics.units: unknown unit 'furlong per'"),
        (nothing, ["physics.quadrature=boole"], r"physics.quadrature = 'boole': must be 'trapezoid'"),
        (nothing, ["physics.kernels=kernel.csv"], r"physics.kernels is no setting; did you mean 'kernel'\?"),
        (nothing, ["ground.margin=1 m"], r"ground.margin: the grid of data is the survey's own; leave"),
        (nothing, ["ground.depth=1 m"], r"ground.depth: the grid of data is the survey's own; leave it out"),
        (nothing, ["ground.spacing=0.1 m"], r"0.1 m along elevation, but the nodes of data are 0.0156"),
        (nothing, ["refinement.levels=7"], r"64 intervals with trapezoid weights make 6 rungs and not 7"),
        (
            with_(lambda n: n[:-1], lambda k: k[:, :-1]),
            ["physics.quadrature=simpson"],
            r"physics.quadrature: simpson takes 2 intervals at a time; 63 do not divide; .* 64 nodes",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_used_is_told_in_one_message(
    path: Path, spoil: Spoil, overrides: list[str], message: str
) -> None:
    nodes, _, kernels = integration(65, 8)
    spoil(path.parent, nodes, kernels)
    with pytest.raises(StillgroundError, match=message):
        placed(path, *overrides)


def test_the_number_of_nodes_that_is_told_would_do(path: Path) -> None:
    nodes, ends, _ = integration(60, 8)
    write_survey(path.parent, nodes, np.heaviside(ends[:, None] - nodes, 0.5), ends, 0.01)
    with pytest.raises(ConfigError, match=r"take 1 at most, or a table with more nodes, as 61"):
        placed(path)
    nodes, ends, kernels = integration(61, 8)
    write_survey(path.parent, nodes, kernels, ends, 0.01)
    assert placed(path)[1][0].shape == (16,)


def test_a_stated_spacing_that_agrees_is_welcome(path: Path) -> None:
    assert placed(path, "ground.spacing=15.625 mm")[1][-1].shape == (65,)


def test_a_place_on_the_earth_for_data_without_one_is_refused(path: Path) -> None:
    with pytest.raises(ConfigError, match=r"survey.crs = 'EPSG:32631': data of kind 'kernel' have no place"):
        placed(path, "survey.crs=EPSG:32631")


def test_the_kernel_is_asked_for_by_its_key(path: Path) -> None:
    path.write_text(path.read_text().replace('kernel = "kernel.csv"', ""))
    with pytest.raises(ConfigError, match=r"physics.kernel is missing"):
        load(path)


def test_other_kinds_still_need_a_spacing(small: Path) -> None:
    config, _ = load(small / "small.toml")
    ground = config.ground.model_copy(update={"spacing": None})
    config = config.model_copy(update={"ground": ground})
    (profile,) = read_profiles(config)
    with pytest.raises(ConfigError, match=r"ground.spacing is missing; give the distance of nodes"):
        plan_grids(profile, config)


def test_columns_of_csv_kernels_may_run_downwards(path: Path) -> None:
    nodes, _, kernels = integration(65, 8)
    up = placed(path)[0].scene
    write_kernels(path.parent / "kernel.csv", nodes[::-1], kernels[:, ::-1])
    down = placed(path)[0].scene
    assert up.grid == down.grid
    assert up.grid is not None
    assert_array_equal(up.assemble(up.grid).operator.todense(), down.assemble(up.grid).operator.todense())

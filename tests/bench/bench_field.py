"""What a field costs: our order of elimination against SuperLU's own, memory, further periods, growth, assembly.

Each measurement of a size runs in a process of its own, in processor time, on a square of water and on a coast with
islands. Run with ``python -m pytest tests/bench/bench_field.py -o "addopts=" -s``; it takes some minutes.
"""

import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import ndimage, sparse
from scipy.sparse.linalg import splu

from shelfmap.constants import GRAVITY_M_S2
from shelfmap.dissection import dissected
from shelfmap.longwave import edge_supply, factorise, floored_friction, memory_bytes, twist_area, wave_matrix
from shelfmap.mesh import EAST, NORTH, TWIST, Mesh, make_mesh
from shelfmap.waters import Waters

STEP_DEG = 0.01
PERIODS_H = (12.42, 12.0, 23.93)
FRICTION_M_S = 1e-3
SIZES = (50_000, 100_000, 200_000, 500_000, 1_000_000)
#: Shares of a node's elevation halfway between lumped and linear, along one axis: at the same and at the other end.
NEAR, FAR = 5 / 12, 1 / 12
#: Gigabytes are binary here, as the limit on memory is.
GIB = 2.0**30


def square(n_nodes: int) -> Waters:
    """Open in the north, closed elsewhere."""
    n = round(np.sqrt(n_nodes)) - 1
    return drawn(np.full((n, n), 50.0))


def coast(n_nodes: int) -> Waters:
    """Sea in the north, a jagged coast with bays and islands in the south, the same at all sizes but for detail."""
    n = int(np.sqrt(n_nodes / 0.62))
    rng = np.random.default_rng(3)
    height = 1.2 * np.linspace(-1.2, 2.2, n)[:, None] + np.zeros((n, n))
    for knots, size in ((13, 1.0), (64, 0.5)):
        height += size * ndimage.zoom(rng.standard_normal((knots, knots)), n / knots, order=1)[:n, :n]
    height += ndimage.gaussian_filter(rng.standard_normal((n, n)), 1.5)
    basin, _ = ndimage.label(height > 0)
    return drawn(np.where(basin == basin[-1, n // 2], 20.0 + 80.0 * np.minimum(height, 2.0), np.nan))


def drawn(depth_m: NDArray[np.float64]) -> Waters:
    is_open = np.zeros((4, *depth_m.shape), dtype=bool)
    is_open[2, -1] = ~np.isnan(depth_m[-1])
    return Waters(
        crs_wkt="EPSG:4326", x0=0.0, y0=40.0, dx=STEP_DEG, dy=STEP_DEG, n_rows=depth_m.shape[0],
        n_cols=depth_m.shape[1], wraps=False, depth_m=depth_m, is_open=is_open,
    )  # fmt: skip


REGIONS: dict[str, Callable[[int], Waters]] = {"square": square, "coast": coast}


def timed(do: Callable[[], object], repeats: int = 1) -> tuple[float, object]:
    """Least seconds of processor time, and what came of it."""
    least = np.inf
    for _ in range(repeats):
        start = time.process_time()
        result = do()
        least = min(least, time.process_time() - start)
    return float(least), result


def places(mesh: Mesh) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """Row and column of each node."""
    row, col = (mesh.node_lat_deg - 40.0) / STEP_DEG + 0.5, mesh.node_lon_deg / STEP_DEG + 0.5
    return np.rint(row).astype(np.int32), np.rint(col).astype(np.int32)


def whole(region: str, n_nodes: int) -> dict[str, float]:
    """All that one solution takes, as users run it, and its peak of memory."""
    make_mesh(square(100))  # loops compiled or read from their cache
    wave = 2 * np.pi / (3600 * PERIODS_H[0])
    factorise(make_mesh(square(100)), wave, FRICTION_M_S)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    waters = REGIONS[region](n_nodes)
    took: dict[str, float] = {}
    took["mesh"], mesh = timed(lambda: make_mesh(waters))
    took["factors"], factors = timed(lambda: factorise(mesh, wave, FRICTION_M_S))
    edge = np.ones(len(mesh.edge_node), dtype=complex)
    took["solve"], elevation = timed(lambda: factors.elevation(edge))
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return {
        "unknowns": mesh.n_free, **took, "peak_gib": peak * 1024 / GIB, "before_gib": before * 1024 / GIB,
        "estimate_gib": memory_bytes(mesh.n_free) / GIB, "size": float(np.linalg.norm(elevation)),
    }  # fmt: skip


def ours(region: str, n_nodes: int) -> dict[str, float]:
    """Order, once; then assembly, factors and solution of each of three periods: the means, and of the factors all."""
    make_mesh(square(100))
    wave_matrix(make_mesh(square(100)), 1e-4, FRICTION_M_S)
    mesh = make_mesh(REGIONS[region](n_nodes))
    order_s, _ = timed(lambda: dissected(*places(mesh)))
    found = {"unknowns": float(mesh.n_free), "order": order_s}
    assembly, factors, solve = [], [], []
    for period_h in PERIODS_H:
        wave = 2 * np.pi / (3600 * period_h)
        assembly.append(timed(lambda wave=wave: wave_matrix(mesh, wave, FRICTION_M_S))[0])
        both_s, factored = timed(lambda wave=wave: factorise(mesh, wave, FRICTION_M_S))
        factors.append(both_s - assembly[-1])
        solve_s, elevation = timed(lambda factored=factored: factored.elevation(np.ones(len(mesh.edge_node)) + 0j))
        solve.append(solve_s)
        found.setdefault("size", float(np.linalg.norm(elevation)))
    for name, values in (("assembly", assembly), ("factors", factors), ("solve", solve)):
        found[name] = float(np.mean(values))
    found["least factors"] = min(factors)
    return found


def superlu(region: str, n_nodes: int, **options: object) -> dict[str, float]:
    """Order and factors by SuperLU itself, of the same matrix with nodes numbered row by row."""
    mesh = make_mesh(REGIONS[region](n_nodes))
    matrix = wave_matrix(mesh, 2 * np.pi / (3600 * PERIODS_H[0]), FRICTION_M_S)
    row, col = places(mesh)
    by_rows = np.lexsort((col, row))
    supply = np.asarray(edge_supply(mesh, matrix).sum(axis=1)).ravel()[by_rows]
    matrix = sparse.csc_matrix(matrix[by_rows][:, by_rows])
    factors_s, lu = timed(lambda: splu(matrix, **options))
    return {"unknowns": mesh.n_free, "factors": factors_s, "size": float(np.linalg.norm(lu.solve(supply)))}


def colamd(region: str, n_nodes: int) -> dict[str, float]:
    return superlu(region, n_nodes)


def minimum_degree(region: str, n_nodes: int) -> dict[str, float]:
    """The best SuperLU has for a matrix of symmetric pattern."""
    return superlu(region, n_nodes, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.01, options={"SymmetricMode": True})


MEASURES = {measure.__name__: measure for measure in (whole, ours, colamd, minimum_degree)}


def measured(measure: str, region: str, n_nodes: int, limit_s: float | None = None) -> dict[str, float] | None:
    """A measurement by a process of its own; None where it takes longer than the limit."""
    command = [sys.executable, __file__, measure, region, str(n_nodes)]
    alone = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
    try:
        done = subprocess.run(command, env=alone, timeout=limit_s, capture_output=True, text=True, check=True)
    except subprocess.TimeoutExpired:
        return None
    return json.loads(done.stdout.splitlines()[-1])


def show(capsys: pytest.CaptureFixture[str], *lines: str) -> None:
    with capsys.disabled():
        print("\n" + "\n".join(lines))  # noqa: T201


@pytest.mark.parametrize("region", REGIONS)
def test_order_against_superlu(region, capsys):
    """Order and factors, ours against SuperLU's default, as large as that finishes in six times as long."""
    lines = [f"{time.strftime('%F')} {region}: order + factors, s", "  unknowns     ours   COLAMD  ratio  min. degree"]
    ratio = np.nan
    names = ["colamd", "minimum_degree"]
    for n_nodes in SIZES[:4]:
        mine = measured("ours", region, n_nodes)
        mine_s = mine["order"] + mine["least factors"]
        twins = {}
        for name in names.copy():
            twins[name] = measured(name, region, n_nodes, 6 * 3 * mine_s + 60)
            if twins[name] is None:
                names.remove(name)
            else:
                np.testing.assert_allclose(twins[name]["size"], mine["size"], rtol=1e-8)
        taken = {name: twin["factors"] for name, twin in twins.items() if twin}
        ratio = taken.get("colamd", np.nan) / mine_s if "colamd" in taken else ratio
        default, degree = (f"{taken[name]:8.2f}" if name in taken else "       -" for name in MEASURES if name in (
            "colamd", "minimum_degree"))  # fmt: skip
        lines.append(f"{mine['unknowns']:10.0f} {mine_s:8.2f} {default} {ratio:6.1f} {degree}")
    show(capsys, *lines)
    assert ratio >= 1.5


@pytest.mark.parametrize("region", REGIONS)
def test_memory_and_growth(region, capsys):
    """A million unknowns in less than 4 GiB; time grows little faster than they do; the estimate bounds the peak."""
    found = [measured("whole", region, n_nodes) for n_nodes in SIZES]
    lines = [
        f"{time.strftime('%F')} {region}: all of one solution, s and GiB",
        "  unknowns     mesh  factors    solve     peak  of which before  estimate  estimate / (peak - before)",
    ]
    factors = []
    for row in found:
        factors.append(row["estimate_gib"] / (row["peak_gib"] - row["before_gib"]))
        lines.append(
            f"{row['unknowns']:10.0f} {row['mesh']:8.2f} {row['factors']:8.2f} {row['solve']:8.2f} "
            f"{row['peak_gib']:8.2f} {row['before_gib']:16.2f} {row['estimate_gib']:9.2f} {factors[-1]:10.2f}"
        )
    unknowns = [row["unknowns"] for row in found]
    taken = [row["mesh"] + row["factors"] + row["solve"] for row in found]
    exponent = np.polyfit(np.log(unknowns), np.log(taken), 1)[0]
    show(capsys, *lines, f"  time grows as unknowns to the {exponent:.2f}")
    assert found[-1]["peak_gib"] < 4.0
    assert exponent <= 1.35
    assert min(factors) >= 1.0
    assert max(factors) <= 1.6


def test_further_periods(capsys):
    """The order is made once; a further period takes assembly, factors and solution."""
    lines = [f"{time.strftime('%F')} coast: s", "  unknowns    order once  then a period: assembly  factors    solve"]
    for n_nodes in SIZES:
        row = measured("ours", "coast", n_nodes)
        lines.append(
            f"{row['unknowns']:10.0f} {row['order']:13.2f} {row['assembly']:24.2f} {row['factors']:8.2f} "
            f"{row['solve']:8.2f}"
        )
        assert row["assembly"] < 0.5 * row["factors"]
    show(capsys, *lines)


def plain_matrix(mesh: Mesh, omega: float, friction_m_s: float) -> sparse.csc_matrix:
    """The same matrix, triplets of all cells at once: what one would write without a compiled loop."""
    s = floored_friction(mesh, friction_m_s) - 1j * omega
    spread = GRAVITY_M_S2 * mesh.depth_m / (s * s + mesh.coriolis_rad_s**2)
    south, product, west = (part[:, None, None] / mesh.area_m2[:, None, None] for part in mesh.sides.T)
    share = np.where(np.equal.outer(EAST, EAST), NEAR, FAR) * np.where(np.equal.outer(NORTH, NORTH), NEAR, FAR)
    east_north = np.outer(EAST, NORTH)
    gradients = west * np.outer(EAST, EAST) - product * (east_north + east_north.T) + south * np.outer(NORTH, NORTH)
    entries = (
        (-1j * omega * mesh.area_m2)[:, None, None] * share
        + (spread * s)[:, None, None] * gradients
        + (spread * mesh.coriolis_rad_s)[:, None, None] * (east_north - east_north.T)
        + (twist_area(mesh) * GRAVITY_M_S2 * mesh.depth_m / s)[:, None, None] * np.outer(TWIST, TWIST)
    )
    rows, cols = np.repeat(mesh.corner, 4, axis=1), np.tile(mesh.corner, (1, 4))
    flow = np.sqrt(GRAVITY_M_S2 * mesh.depth_m[mesh.side_cell]) * mesh.side_m
    first, last = mesh.edge_node[mesh.side_ends].T
    all_rows = np.concatenate([rows.ravel(), first, last, first, last])
    all_cols = np.concatenate([cols.ravel(), first, last, last, first])
    values = np.concatenate([entries.ravel(), NEAR * flow, NEAR * flow, FAR * flow, FAR * flow])
    return sparse.coo_matrix((values, (all_rows, all_cols)), shape=(mesh.n_nodes, mesh.n_nodes)).tocsc()


def test_assembly(capsys):
    """The compiled loop is many times faster than triplets, and adds up the same matrix."""
    mesh = make_mesh(coast(200_000))
    wave = 2 * np.pi / (3600 * PERIODS_H[0])
    wave_matrix(mesh, wave, FRICTION_M_S)
    loop_s, matrix = timed(lambda: wave_matrix(mesh, wave, FRICTION_M_S), 5)
    plain_s, plain = timed(lambda: plain_matrix(mesh, wave, FRICTION_M_S), 3)
    assert abs(matrix - plain).max() <= 1e-12 * abs(plain).max()
    show(
        capsys,
        f"assembly of {mesh.n_nodes} unknowns: {loop_s:.3f} s, triplets {plain_s:.3f} s, {plain_s / loop_s:.1f}x",
    )
    assert plain_s / loop_s > 3


if __name__ == "__main__":
    print(json.dumps(MEASURES[sys.argv[1]](sys.argv[2], int(sys.argv[3]))))  # noqa: T201

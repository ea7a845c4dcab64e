"""Zone sums: conservation, order, percentiles, and the table's rules."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import box

from saltrise.block_sums import BlockSums
from saltrise.coverage import BlockCover, block_cover, prepare_zones
from saltrise.grid import Grid, Window, cell_areas
from saltrise.zonal import (
    REGION,
    ZonePartial,
    ZoneTotals,
    ZoneValues,
    merge_partials,
    pack,
    unpack,
)
from saltrise.zone_table import region_figures, zone_table

WKT = pyproj.CRS.from_epsg(32740).to_wkt()
UNIT = 900.0 * 2.0**-16


def grid_of(width: int, height: int) -> Grid:
    return Grid(WKT, (30.0, 0.0, 5e5, 0.0, -30.0, 6e6), width, height, 16)


def random_values(size: int, random: np.random.Generator) -> ZoneValues:
    depth = random.uniform(-0.5, 5, size)
    load = random.lognormal(1, 1.5, size)
    load[random.random(size) < 0.1] = 0.0
    classes = (1 + np.searchsorted([1, 5, 15, 30], load, side="right")).astype(np.uint8)
    classes[depth <= 0.001] = 6
    classes[random.random(size) < 0.1] = 0
    for array in (depth, load):
        array[classes == 0] = 7.5
    critical = random.uniform(0, 4, size)
    return ZoneValues(depth, load * 30, load, critical, depth - critical, classes, depth * 5)


def partial_of(cover: BlockCover, areas: np.ndarray, values: ZoneValues) -> ZonePartial:
    """Sums of a block, taken in three strips."""
    sums, area = BlockSums(cover, UNIT), areas.ravel()
    for part in np.array_split(np.arange(area.size), 3):
        if part.size:
            sums.add(int(part[0]), area[part], values.part(part))
    return sums.partial()


def partials_of(grid: Grid, zones: list, seed: int = 0) -> list[tuple[ZonePartial, ZoneValues]]:
    shapes = prepare_zones(zones, grid)
    random = np.random.default_rng(seed)
    found = []
    for block in grid.blocks():
        values = random_values(block.height * block.width, random)
        areas = cell_areas(grid, block)
        found.append((partial_of(block_cover(shapes, block), areas, values), values))
    return found


def totals_of(grid: Grid, zones: list, seed: int = 0) -> ZoneTotals:
    return merge_partials(partial for partial, _ in partials_of(grid, zones, seed))


def table_of(totals: ZoneTotals, count: int, area: float = 1e6, rank_by: str = "mean", **other):
    ids = other.get("ids", [f"z{k}" for k in range(count)])
    areas = other.get("areas", [area] * count)
    return zone_table(totals, ids, ids, areas, [0.0] * count, rank_by)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 99), st.integers(3, 50), st.integers(3, 50))
def test_zones_that_partition_the_region_add_up_to_it(seed: int, width: int, height: int) -> None:
    grid = grid_of(width, height)
    whole = box(5e5, 6e6 - 30 * height, 5e5 + 30 * width, 6e6)
    random = np.random.default_rng(seed)
    points = shapely.MultiPoint(random.uniform([5e5, 6e6 - 1500], [5e5 + 1500, 6e6], (7, 2)))
    parts = [p & whole for p in shapely.voronoi_polygons(points, extend_to=whole).geoms]
    parts = [p for p in parts if p.area > 0]
    totals = totals_of(grid, parts, seed)
    table, region = table_of(totals, len(parts)), region_figures(totals)
    for column in (
        "salt_load_t_per_year",
        "assessed_ha",
        "nodata_ha",
        "too_shallow_ha",
        "high_ha",
        "depth_1_to_2_ha",
        "at_surface_salt_load_t_per_year",
    ):
        assert sum(table[column]) == pytest.approx(region[column], rel=1e-9, abs=1e-12)


def test_the_order_of_blocks_and_packing_change_no_bit() -> None:
    found = [p for p, _ in partials_of(grid_of(50, 40), [box(5e5, 5.999e6, 5.01e5, 6e6)])]
    one = merge_partials(found)
    two = merge_partials([unpack(pack(found[4:])), unpack(pack(found[:4][::-1]))])
    for zone, sums in one.sums.items():
        np.testing.assert_array_equal(two.sums[zone], sums)
    for name in ("zone", "quantity", "bin", "weight"):
        np.testing.assert_array_equal(getattr(one.histogram, name), getattr(two.histogram, name))


def test_region_figures_equal_plain_sums() -> None:
    grid = grid_of(50, 40)
    found = partials_of(grid, [])
    figures = region_figures(merge_partials(p for p, _ in found))
    values = [v for _, v in found]
    area = np.concatenate([cell_areas(grid, b).ravel() for b in grid.blocks()])
    load, depth, classes, margin = (
        np.concatenate([getattr(v, n) for v in values])
        for n in ("salt_load", "depth_m", "hazard_class", "depth_margin")
    )
    assessed = (classes >= 1) & (classes <= 5)
    total = area[assessed].sum()
    assert figures["assessed_ha"] == pytest.approx(total / 1e4, rel=1e-12)
    assert figures["depth_mean_m"] == pytest.approx(
        (depth * area)[assessed].sum() / total, rel=1e-12
    )
    assert figures["salt_load_t_per_year"] == pytest.approx(
        (load * area)[assessed].sum() / 1e4, rel=1e-12
    )
    assert figures["depth_2_to_3_ha"] == pytest.approx(
        area[assessed & (depth >= 2) & (depth < 3)].sum() / 1e4, rel=1e-12
    )
    assert figures["too_shallow_ha"] == pytest.approx(
        area[assessed & (margin < 0)].sum() / 1e4, rel=1e-12
    )
    assert figures["at_surface_ha"] == pytest.approx(area[classes == 6].sum() / 1e4, rel=1e-12)
    assert figures["nodata_ha"] == pytest.approx(area[classes == 0].sum() / 1e4, rel=1e-12)
    order = np.argsort(load[assessed])
    share = np.cumsum(area[assessed][order]) / total
    for percent in (10, 50, 90):
        exact = load[assessed][order][np.searchsorted(share, percent / 100)]
        ours = figures[f"salt_load_p{percent}_t_per_ha_per_year"]
        assert ours == pytest.approx(exact, rel=0.005)


def test_percentiles_know_zero() -> None:
    values = ZoneValues(
        *(np.array([2.0] * 4) for _ in range(2)),
        np.array([0.0, 0.0, 0.0, 8.0]),
        np.zeros(4),
        np.full(4, 2.0),
        np.array([1, 1, 1, 3], dtype=np.uint8),
        np.zeros(4),
    )
    nothing = block_cover(prepare_zones([], grid_of(2, 2)), Window(0, 0, 2, 2))
    figures = region_figures(merge_partials([partial_of(nothing, np.full(4, 9.0), values)]))
    assert figures["salt_load_p50_t_per_ha_per_year"] == 0.0
    assert figures["salt_load_p90_t_per_ha_per_year"] == pytest.approx(8.0, rel=0.005)
    assert figures["critical_depth_p80_m"] == 0.0


def test_a_zone_far_smaller_than_a_cell_has_a_row() -> None:
    speck = box(5e5 + 1, 6e6 - 2, 5e5 + 1.01, 6e6 - 1.99)
    totals = totals_of(grid_of(20, 20), [speck], seed=4)
    table = table_of(totals, 1, area=speck.area)
    # The projection's scale at the central meridian is 0.9996: true areas are 8e-4 larger.
    assert table["assessed_ha"][0] == pytest.approx(speck.area / 1e4, rel=1e-3)
    assert table["salt_load_p50_t_per_ha_per_year"][0] is not None


def test_overlapping_zones_count_their_common_cells_each() -> None:
    shape = box(5e5 + 60, 6e6 - 300, 5e5 + 400, 6e6 - 100)
    totals = totals_of(grid_of(20, 20), [shape, shape])
    # Cells of a second zone are added up in another order.
    np.testing.assert_allclose(totals.sums[0], totals.sums[1], rtol=1e-14)


def test_ranks_go_from_the_worst_ties_by_id_and_need_sixty_percent() -> None:
    strips = [box(5e5 + 150 * k, 6e6 - 600, 5e5 + 150 * (k + 1), 6e6) for k in range(4)]
    totals = totals_of(grid_of(20, 20), [*strips, strips[0]], seed=5)
    areas = [s.area for s in strips] + [strips[0].area]
    table = table_of(totals, 5, areas=areas, ids=["b", "c", "d", "e", "a"])
    means = table["salt_load_mean_t_per_ha_per_year"]
    by_rank = [id_ for _, id_ in sorted(zip(table["rank"], table["zone_id"], strict=True))]
    by_mean = sorted(range(5), key=lambda k: (-means[k], table["zone_id"][k]))
    assert by_rank == [table["zone_id"][k] for k in by_mean]
    assert by_rank.index("a") + 1 == by_rank.index("b")
    half = table_of(totals, 5, areas=[a * (2 if k == 1 else 1) for k, a in enumerate(areas)])
    assert half["rank"][1] is None
    assert sorted(r for r in half["rank"] if r) == [1, 2, 3, 4]


@pytest.mark.parametrize(
    ("rank_by", "column"), [("total", "salt_load_t_per_year"), ("too_shallow", "too_shallow_ha")]
)
def test_other_rankings(rank_by: str, column: str) -> None:
    strips = [box(5e5 + 150 * k, 6e6 - 600, 5e5 + 150 * (k + 1), 6e6) for k in range(4)]
    table = table_of(totals_of(grid_of(20, 20), strips), 4, strips[0].area, rank_by)
    worst = table["rank"].index(1)
    assert table[column][worst] == max(table[column])


def test_a_zone_without_cells_has_zeros_and_empty_means() -> None:
    totals = totals_of(grid_of(20, 20), [box(0, 0, 1, 1)])
    table = table_of(totals, 1)
    assert table["assessed_ha"] == [0.0]
    assert table["salt_load_t_per_year"] == [0.0]
    for column in (
        "depth_mean_m",
        "salt_load_mean_t_per_ha_per_year",
        "salt_load_p50_t_per_ha_per_year",
        "rank",
    ):
        assert table[column] == [None]
    assert 0 not in totals.sums
    assert REGION in totals.sums


def test_columns_are_the_contract_in_order() -> None:
    expected = (
        "zone_id, name, area_ha, assessed_ha, assessed_share, at_surface_ha, nodata_ha, "
        "outside_ha, "
        "depth_mean_m, depth_under_1_ha, depth_1_to_2_ha, depth_2_to_3_ha, depth_over_3_ha, "
        "evaporation_mean_mm_per_year, salt_load_t_per_year, salt_load_mean_t_per_ha_per_year, "
        "salt_load_p10_t_per_ha_per_year, salt_load_p50_t_per_ha_per_year, "
        "salt_load_p90_t_per_ha_per_year, critical_depth_p50_m, critical_depth_p80_m, "
        "depth_margin_mean_m, too_shallow_ha, very_low_ha, low_ha, moderate_ha, high_ha, "
        "very_high_ha, at_surface_salt_load_t_per_year, rank"
    ).split(", ")
    assert list(table_of(totals_of(grid_of(20, 20), [box(5e5, 5.9e6, 5.1e5, 6e6)]), 1)) == expected

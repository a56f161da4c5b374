"""Figures: written whole, the same bytes for the same input, with words that carry the numbers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from PIL import Image

from change_assess.errors import InputError
from change_assess.legend import Legend
from change_assess.reporting import figures

LEGEND = Legend.of_names(["forest", "crop", "water"])
ROWS = pd.DataFrame(
    {
        "class": ["forest loss", "forest loss", "no change"],
        "period": ["2016–2019", "2019–2022", "2016–2019"],
        "estimate": [1200.0, 900.0, 800_000.0],
        "lower": [900.0, None, 799_000.0],
        "upper": [1700.0, None, 801_000.0],
        "map_area_ha": [1000.0, 950.0, 803_000.0],
        "true_area_ha": [1150.0, 980.0, 800_500.0],
    }
)
NAMES = ["forest loss", "no change"]
MATRIX = pd.DataFrame([[0.006, 0.001], [0.0004, 0.9926]], index=NAMES, columns=NAMES)


def panel(path: Path) -> figures.Figure:
    rng = np.random.default_rng(1)
    cover = rng.integers(0, 4, (80, 120))
    points = pd.DataFrame(
        {"x": rng.uniform(0, 2400, 90), "y": rng.uniform(0, 1600, 90), "stratum": ["a", "b", "c"] * 30}
    )
    return figures.map_panel(
        {"2016": cover, "2019": cover[:, ::-1]}, LEGEND, path, extent=(0, 2400, 0, 1600),
        changes={"2016–2019": np.where(cover == 0, -1, cover == 1)}, change_names=["no change", "forest loss"],
        points=points,
    )  # fmt: skip


def draw(name: str, path: Path) -> figures.Figure:
    if name == "panel":
        return panel(path)
    return figures.matrix_heat(MATRIX, path) if name == "matrix" else figures.estimates_against_map(ROWS, path)


@pytest.mark.parametrize("name", ["panel", "matrix", "estimates"])
def test_figures_are_written_twice_alike(tmp_path: Path, name: str) -> None:
    """Each figure is an SVG and a PNG, nothing else is left in the folder, and a second run gives the same bytes."""
    first, second = draw(name, tmp_path / "a" / f"{name}.svg"), draw(name, tmp_path / "b" / name)
    assert sorted(p.name for p in (tmp_path / "a").iterdir()) == [f"{name}.png", f"{name}.svg"]
    assert first.path.read_bytes() == second.path.read_bytes()
    assert first.png.read_bytes() == second.png.read_bytes()
    assert first.path.read_text(encoding="utf-8").startswith("<?xml")


@pytest.mark.parametrize("name", ["panel", "matrix", "estimates"])
def test_nothing_is_cut_off_at_the_border(tmp_path: Path, name: str) -> None:
    """The outermost pixels of each PNG are white, so no label runs over the edge."""
    pixels = np.asarray(Image.open(draw(name, tmp_path / name).png).convert("RGB"))
    border = np.concatenate([pixels[:2].reshape(-1, 3), pixels[-2:].reshape(-1, 3), pixels[:, 0], pixels[:, -1]])
    assert (border == 255).all()
    assert pixels.min() < 80


def test_long_names_are_not_cut_off(tmp_path: Path) -> None:
    """Class names of forty letters fit into both the matrix and the estimates."""
    long = "open forest on former farmland, replanted"
    matrix = MATRIX.rename(index={NAMES[0]: long}, columns={NAMES[0]: long})
    paths = [figures.matrix_heat(matrix, tmp_path / "m").png]
    paths.append(figures.estimates_against_map(ROWS.replace({"class": {NAMES[0]: long}}), tmp_path / "e").png)
    for path in paths:
        pixels = np.asarray(Image.open(path).convert("L"))
        assert (pixels[:, :2] == 255).all()
        assert (pixels[:, -2:] == 255).all()
        assert (pixels[:2] == 255).all()


def test_alt_text_tells_the_numbers(tmp_path: Path) -> None:
    """The words hold estimate, interval, mapped and true area, or the shares of the matrix, or the sample sizes."""
    words = draw("estimates", tmp_path / "e").alt
    assert "forest loss 2016–2019: estimate 1,200 ha (900 to 1,700), mapped 1,000 ha, true 1,150 ha" in words
    assert "forest loss 2019–2022: estimate 900 ha, mapped 950 ha" in words
    assert "map forest loss, reference no change: 0.10 %" in draw("matrix", tmp_path / "m").alt
    assert "90 sample units by stratum (a 30, b 30, c 30)" in panel(tmp_path / "p").alt


def test_periods_and_truth_may_be_missing(tmp_path: Path) -> None:
    """One period without a name, no truth, and an estimate that is not estimable still make a figure."""
    rows = ROWS.drop(columns=["period", "true_area_ha"]).iloc[[0, 2]].assign(estimate=[None, 800_000.0])
    assert "forest loss: estimate not estimable" in figures.estimates_against_map(rows, tmp_path / "x").alt


def test_many_strata_share_one_colour(tmp_path: Path) -> None:
    """Of thirty strata the seven largest have a colour of their own and the others are one grey entry."""
    strata = pd.Series([f"s{i}" for i in range(30) for _ in range(i + 1)])
    drawn = figures._stratum_colours(strata, strata.value_counts(sort=False), [])
    assert [name for name, _, _ in drawn] == ["23 other strata", *(f"s{i}" for i in range(23, 30))]
    assert len({colour for _, colour, _ in drawn}) == 8
    assert sum(members.sum() for _, _, members in drawn) == len(strata)


def test_rare_change_survives_shrinking() -> None:
    """One changed pixel among a million is still there after the raster was made as small as a panel."""
    change = np.zeros((1000, 1500), dtype=np.int16)
    change[501, 700] = 1
    shrunk = figures._rarest(change, 2)
    assert max(shrunk.shape) <= 700
    assert (shrunk == 1).sum() == 1


def test_missing_columns_and_empty_input_are_refused(tmp_path: Path) -> None:
    """A table without a needed column, or nothing to draw, is named."""
    with pytest.raises(InputError, match="no column 'map_area_ha'"):
        figures.estimates_against_map(ROWS.drop(columns="map_area_ha"), tmp_path / "x")
    with pytest.raises(InputError, match="no estimates"):
        figures.estimates_against_map(ROWS.iloc[:0], tmp_path / "x")
    with pytest.raises(InputError, match="matrix is empty"):
        figures.matrix_heat(pd.DataFrame(), tmp_path / "x")
    with pytest.raises(InputError, match="no map"):
        figures.map_panel({}, LEGEND, tmp_path / "x", extent=(0, 1, 0, 1))
    assert not list(tmp_path.iterdir())

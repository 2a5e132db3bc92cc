"""Ten bands, eight indices and two 3 x 3 textures, block by block, beside reading alone and beside plain numpy."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
from bench_scene import BLOCK_PX, COARSE, FINE, SIDE_PX, make, read_scene, scene_of
from measure import alternate

from classify.features import Recipe, build_recipe
from classify.raster.scene import Scene
from classify.settings import FeatureSettings

ROLES = (*FINE, *COARSE)
INDICES = ["ndvi", "evi", "savi", "ndwi", "ndmi", "ndti", "bsi", "nbr"]
TEXTURES = [{"of": "nir", "statistic": "standard deviation"}, {"of": "swir_1", "statistic": "mean"}]
GREY = [{"of": "nir", "statistic": statistic} for statistic in ("contrast", "entropy")]

Layers = dict[str, np.ndarray]


def recipe_of(**features: object) -> Recipe:
    return build_recipe(FeatureSettings.model_validate(features), ROLES)


def plain_indices(layers: Layers) -> np.ndarray:
    """Bands and indices as one writes them with numpy, infinities made NaN as ours are."""
    blue, green, red, nir, swir_1, swir_2 = (
        layers[role] for role in ("blue", "green", "red", "nir", "swir_1", "swir_2")
    )
    with np.errstate(all="ignore"):
        out = np.stack([
            *(layers[role] for role in ROLES),
            (nir - red) / (nir + red), 2.5 * (nir - red) / (nir + 6 * red - 7.5 * blue + 1),
            1.5 * (nir - red) / (nir + red + 0.5), (green - nir) / (green + nir), (nir - swir_1) / (nir + swir_1),
            (swir_1 - swir_2) / (swir_1 + swir_2),
            ((swir_1 + red) - (nir + blue)) / ((swir_1 + red) + (nir + blue)), (nir - swir_2) / (nir + swir_2),
        ])  # fmt: skip
        out[np.isinf(out)] = np.nan
    return out


def plain_textures(layers: Layers) -> np.ndarray:
    """The textures as one writes them with numpy; layers with a halo of one pixel, no invalid pixels."""

    def windows(layer: np.ndarray) -> np.ndarray:
        return np.lib.stride_tricks.sliding_window_view(layer, (3, 3))

    inner = {role: layer[1:-1, 1:-1] for role, layer in layers.items()}
    deviation, mean = windows(layers["nir"]).std(axis=(2, 3)), windows(layers["swir_1"]).mean(axis=(2, 3))
    return np.concatenate([plain_indices(inner), [deviation, mean]])


def over_blocks(work: Callable[[Layers], np.ndarray], blocks: list[Layers]) -> None:
    for layers in blocks:
        work(layers)


def read_and_compute(scene: Scene, recipe: Recipe) -> None:
    with scene.open() as reader:
        for window in scene.grid.blocks(BLOCK_PX):
            recipe.compute(reader.read(window, recipe.needs, halo_px=recipe.halo_px))


def cut(layers: Layers, halo_px: int) -> list[Layers]:
    """Blocks with a halo, as a reader hands them out; the outermost ring of the scene serves as theirs."""
    side = next(iter(layers.values())).shape[0] - 2
    starts = range(1, side + 1, BLOCK_PX)
    blocks = []
    for row in starts:
        for col in starts:
            ends = min(row + BLOCK_PX, side + 1) + halo_px, min(col + BLOCK_PX, side + 1) + halo_px
            part = np.s_[row - halo_px : ends[0], col - halo_px : ends[1]]
            blocks.append({role: layer[part].copy() for role, layer in layers.items()})
    return blocks


def rows(quick: bool) -> list[dict[str, object]]:
    """Seconds per megapixel, and their ratio to reading alone or to plain numpy."""
    side = 800 if quick else SIDE_PX
    indices, textures = recipe_of(indices=INDICES), recipe_of(indices=INDICES, texture=TEXTURES)
    grey = recipe_of(bands=[], texture=GREY)
    rng = np.random.default_rng(1)
    layers = {role: rng.uniform(0.02, 0.6, (side + 2, side + 2)).astype(np.float32) for role in ROLES}
    plain, halo = cut(layers, 0), cut(layers, 1)
    np.testing.assert_allclose(textures.compute(halo[0]), plain_textures(halo[0]), rtol=2e-3, atol=1e-6)
    with tempfile.TemporaryDirectory() as name:
        make(Path(name), side)
        scene = scene_of(Path(name), resampling="nearest")
        groups: list[dict[str, Callable[[], object]]] = [
            {
                "reading ten bands alone": partial(read_scene, scene),
                "reading, bands and indices": partial(read_and_compute, scene, indices),
                "reading, bands, indices, textures": partial(read_and_compute, scene, textures),
            },
            {
                "plain numpy, bands and indices": partial(over_blocks, plain_indices, plain),
                "bands and indices": partial(over_blocks, indices.compute, plain),
            },
            {
                "plain numpy, bands, indices, textures": partial(over_blocks, plain_textures, halo),
                "bands, indices, textures": partial(over_blocks, textures.compute, halo),
                "two co-occurrence statistics of 3 x 3": partial(over_blocks, grey.compute, halo),
            },
        ]
        found = []
        for works in groups:
            seconds = alternate(works, repeats=2 if quick else 5)
            first, bare = next(iter(seconds.items()))
            found += [
                {"work": label, "s per megapixel": took / (side**2 / 1e6), "ratio": took / bare, "to": first}
                for label, took in seconds.items()
            ]
    return found

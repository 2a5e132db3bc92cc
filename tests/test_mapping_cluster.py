"""The same map from a Dask cluster, also when a worker is lost; clusters that cannot be used are named as such."""

from __future__ import annotations

import os
import signal
import socket
import sys
import time
from dataclasses import replace
from pathlib import Path

import distributed
import numpy as np
import pytest
import rasterio
from small_project import make_small_project

from classify.errors import DataError, LandassayError
from classify.mapping import cluster as cluster_module
from classify.mapping import engines
from classify.mapping.classify_scene import MapOptions, classify_scene
from classify.models import load_model
from classify.raster.scene import open_scene
from classify.settings import load_project
from classify.workflow import Job, run

OPTIONS = MapOptions(block_px=16, reach=True)
FILES = ("cover.tif", "confidence.tif", "reach.tif", "areas.csv")


@pytest.fixture(scope="module")
def workers():
    """Two workers in processes of their own."""
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, host="127.0.0.1"
    ) as local:
        yield local


@pytest.fixture(scope="module")
def mapping(tmp_path_factory):
    """The scene of a miniature project and a function that maps it."""
    folder = make_small_project(tmp_path_factory.mktemp("trained") / "miniature")
    project = load_project(folder)
    run(Job(project), ["train"])
    model, scene = load_model(folder / "outputs" / "model"), open_scene(project.scene, project)

    def map_into(target, engine=None, *, scene=scene, **changes):
        options = replace(OPTIONS, engine=engine, **changes)
        classify_scene(model, scene, target, classes=project.classes, options=options)
        return {name: (target / name).read_bytes() for name in FILES}

    return scene, map_into


def test_the_same_bytes_although_a_worker_is_killed_midway(workers, mapping, tmp_path):
    _, map_into = mapping
    expected = map_into(tmp_path / "threads")
    with engines.cluster(workers.scheduler_address) as engine:
        assert engine.warnings == ()
        pids = [worker.process.process.pid for worker in workers.workers.values()]
        victim = pids[0]
        real, done = engine.run, []

        def run_and_kill(work, windows):
            for block in real(work, windows):
                done.append(block.number)
                if len(done) == len(windows) // 3:
                    os.kill(victim, signal.SIGKILL)
                yield block

        engine.run = run_and_kill
        assert map_into(tmp_path / "cluster", engine) == expected
        assert sorted(done) == list(range(6 * 8))
        deadline = time.monotonic() + 60
        while len(alive := [w.process.process.pid for w in workers.workers.values() if w.process]) < 2:
            assert time.monotonic() < deadline
            time.sleep(0.1)
        assert victim not in alive


def test_blocks_of_128_and_of_512_give_the_same_bytes_here_and_there(workers, mapping, tmp_path):
    scene, map_into = mapping
    for path in {band.path for band in scene.bands} | {mask.path for mask in scene.masks.values()}:
        with rasterio.open(path) as source:
            values = np.tile(source.read(), (1, 6, 5))
            profile = source.profile | {"height": values.shape[1], "width": values.shape[2]}
        with rasterio.open(tmp_path / Path(path).name, "w", **profile) as target:
            target.write(values)
    grid = replace(scene.grid, height=values.shape[1], width=values.shape[2])
    assert min(grid.shape_yx) > 512

    def moved(part):
        return replace(part, path=str(tmp_path / Path(part.path).name), native=grid)

    larger = replace(
        scene, grid=grid, bands=tuple(map(moved, scene.bands)), masks={k: moved(m) for k, m in scene.masks.items()}
    )
    expected = map_into(tmp_path / "threads", scene=larger, block_px=512)
    assert map_into(tmp_path / "small", scene=larger, block_px=128, jobs=2) == expected
    with engines.cluster(workers.scheduler_address) as engine:
        for side in (128, 512):
            assert map_into(tmp_path / f"cluster_{side}", engine, scene=larger, block_px=side) == expected


def test_an_error_on_a_worker_comes_back_with_its_place(workers, mapping, tmp_path):
    scene, map_into = mapping
    lost = replace(scene, bands=tuple(replace(band, path="/nowhere/b.tif") for band in scene.bands))
    with engines.cluster(workers.scheduler_address) as engine, pytest.raises(DataError) as raised:
        map_into(tmp_path, engine, scene=lost)
    assert raised.value.problems[0].where == "/nowhere/b.tif"
    assert raised.value.problems[0].fix


def test_an_address_that_does_not_answer_is_said_soon(monkeypatch):
    with socket.socket() as silent:
        silent.bind(("127.0.0.1", 0))
        silent.listen()
        monkeypatch.setattr(cluster_module, "_ANSWER_S", 2)
        start = time.monotonic()
        with pytest.raises(LandassayError, match="no scheduler answered") as raised:
            engines.cluster(f"tcp://127.0.0.1:{silent.getsockname()[1]}")
        assert time.monotonic() - start < 10
    assert "127.0.0.1" in raised.value.problems[0].where
    with pytest.raises(LandassayError, match="no scheduler answered"):
        engines.cluster("not an address")


def test_a_scheduler_without_workers_is_said(monkeypatch):
    monkeypatch.setattr(cluster_module, "_ANSWER_S", 2)
    with (
        distributed.LocalCluster(n_workers=0, dashboard_address=None, host="127.0.0.1") as empty,
        pytest.raises(LandassayError, match="has no workers"),
    ):
        engines.cluster(empty.scheduler_address)


def test_versions_that_differ_are_said(workers, monkeypatch):
    real = distributed.Client.get_versions

    def older(self, **options):
        versions = real(self, **options)
        next(iter(versions["workers"].values()))["packages"]["scikit-learn"] = "0.1"
        return versions

    monkeypatch.setattr(distributed.Client, "get_versions", older)
    with engines.cluster(workers.scheduler_address) as engine:
        assert "workers have scikit-learn 0.1" in engine.warnings[0].what

    def without(self, **options):
        versions = real(self, **options)
        next(iter(versions["workers"].values()))["packages"]["landassay"] = None
        return versions

    monkeypatch.setattr(distributed.Client, "get_versions", without)
    with pytest.raises(LandassayError, match="1 of 2 workers do not have landassay"):
        engines.cluster(workers.scheduler_address)


def test_without_dask_the_extra_is_named(monkeypatch):
    monkeypatch.setitem(sys.modules, "classify.mapping.cluster", None)
    with pytest.raises(LandassayError, match="which is missing") as raised:
        engines.cluster("tcp://127.0.0.1:1")
    assert "landassay[cluster]" in raised.value.problems[0].fix

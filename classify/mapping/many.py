"""Many scenes with one model: found, mapped one after the other, a bad one reported while the rest go on."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pandas as pd

from classify.errors import DataError, LandassayError, OutputError, Problem, raise_if_errors
from classify.files import read_json, replacing
from classify.mapping.classify_scene import MapOptions, classify_scene, origin_digest
from classify.mapping.stac import ItemFacts, identifier, write_collection, write_item
from classify.models import TrainedModel
from classify.progress import SILENT, Progress
from classify.raster.guard import is_remote
from classify.raster.scene import open_scene
from classify.raster.stac import acquired, item_files, read_items
from classify.settings import Project, SceneSettings
from classify.tables import csv_text

ITEM_FILE, COLLECTION_FILE, SUMMARY_FILE = "item.json", "collection.json", "areas.csv"
_ORIGIN = "landassay:origin"


@dataclass(frozen=True, slots=True)
class SceneFiles:
    """One scene of many. name: of its output folder. where: where it was found. files: path as written in the project
    file -> path of this scene. when: time of acquisition, if known. problems: why it cannot be mapped.
    """

    name: str
    where: str
    files: Mapping[str, str]
    when: datetime | None = None
    problems: tuple[Problem, ...] = ()


@dataclass(frozen=True, slots=True)
class ManyResult:
    """areas: one row per scene and class. mapped, kept: names of scenes done now, and found done. failed: what was
    wrong, by name. warnings: by name.
    """

    areas: pd.DataFrame
    mapped: tuple[str, ...]
    kept: tuple[str, ...]
    failed: Mapping[str, tuple[Problem, ...]] = field(default_factory=dict)
    warnings: Mapping[str, tuple[Problem, ...]] = field(default_factory=dict)


def find_scenes(sources: Sequence[str], project: Project) -> list[SceneFiles]:
    """The scenes that `sources` name, in order: folders of a scene or of scenes, STAC items, text files of these.

    A folder is a scene if it holds files with the names of the project's bands; otherwise its items and folders are
    looked through, one level deep. A text file has one source per line, from its own folder; lines with # are left out.
    Raises DataError listing every source that leads nowhere.
    """
    problems: list[Problem] = []
    scenes: dict[str, SceneFiles] = {}
    for source in sources:
        try:
            found = list(_found(Path(source), project.scene))
        except DataError as error:
            problems.extend(error.problems)
            continue
        if not found:
            fix = f"a folder needs files named as in the project: {', '.join(sorted(_names(project.scene)))}"
            problems.append(Problem("no scene was found here", source, fix))
        for scene in found:
            if scene.name in scenes:
                problems.append(Problem(f"two scenes are named {scene.name!r}", scene.where, "rename one of them"))
            scenes[scene.name] = scene
    if problems:
        raise DataError(problems)
    return list(scenes.values())


def classify_many(
    model: TrainedModel,
    project: Project,
    scenes: Sequence[SceneFiles],
    folder: Path,
    *,
    options: MapOptions,
    overwrite: bool = False,
    progress: Progress = SILENT,
) -> ManyResult:
    """Map every scene into a folder of its own under `folder`, with a STAC collection and a table of areas of all.

    A map that is there and made from the same inputs is kept; one made from others only goes with `overwrite`.
    """
    mapped: list[str] = []
    kept: list[str] = []
    tables: list[pd.DataFrame] = []
    failed: dict[str, tuple[Problem, ...]] = {}
    warnings: dict[str, tuple[Problem, ...]] = {}
    items: dict[str, Mapping[str, Any]] = {}
    for number, scene in enumerate(scenes, 1):
        progress.note(f"Scene {number} of {len(scenes)}: {scene.name}")
        try:
            done, found = _map_one(model, project, scene, folder, options, overwrite=overwrite, progress=progress)
            items[f"{scene.name}/{ITEM_FILE}"] = read_json(folder / scene.name / ITEM_FILE)
            tables.append(
                pd.read_csv(folder / scene.name / "areas.csv", dtype={"name": str}, keep_default_na=False).assign(
                    scene=scene.name
                )
            )
        except LandassayError as error:
            failed[scene.name] = error.problems
            continue
        (mapped if done else kept).append(scene.name)
        if found:
            warnings[scene.name] = found
    areas = pd.concat(tables, ignore_index=True) if tables else pd.DataFrame()
    if items:
        areas = areas[["scene", *(name for name in areas.columns if name != "scene")]]
        with replacing(folder / SUMMARY_FILE) as temporary:
            temporary.write_bytes(csv_text(areas).encode())
        name = identifier(project.project.title)
        write_collection(folder / COLLECTION_FILE, name, f"Maps of {len(items)} scenes: {project.project.title}", items)
    return ManyResult(areas, tuple(mapped), tuple(kept), failed, warnings)


def _map_one(
    model: TrainedModel, project: Project, files: SceneFiles, folder: Path, options: MapOptions, *, overwrite: bool,
    progress: Progress,
) -> tuple[bool, tuple[Problem, ...]]:  # fmt: skip
    """Whether the scene was mapped now, and warnings."""
    raise_if_errors(files.problems, DataError)
    scene = open_scene(_settings_of(project.scene, files), project)
    origin = origin_digest(model, scene, options, project.classes)
    target = folder / files.name
    if (target / ITEM_FILE).is_file():
        if read_json(target / ITEM_FILE).get("properties", {}).get(_ORIGIN) == origin:
            return False, ()
        if not overwrite:
            raise OutputError(
                "there is a map made from another model, scene or settings", where=str(target),
                fix="give another output folder, or --overwrite to replace it",
            )  # fmt: skip
        (target / ITEM_FILE).unlink()
    result = classify_scene(model, scene, target, classes=project.classes, options=options, progress=progress)
    when, source = (files.when, "the scene's item") if files.when else time_of([b.path for b in scene.bands])
    facts = ItemFacts(identifier(files.name), files.name, when, source, {_ORIGIN: origin})
    written = {**result.files, "areas": target / "areas.csv"}
    write_item(target / ITEM_FILE, facts, scene.grid, written, project.classes)
    return True, (*scene.warnings, *result.warnings)


def time_of(paths: Sequence[str]) -> tuple[datetime, str]:
    """A stand-in for the unknown time of acquisition, and what it is: when the newest of the files was last changed."""
    local = [Path(path).stat().st_mtime for path in paths if not is_remote(path) and Path(path).is_file()]
    return datetime.fromtimestamp(int(max(local, default=0)), UTC), "last change of the scene's files"


def _settings_of(settings: SceneSettings, files: SceneFiles) -> SceneSettings:
    def replaced(part: Any) -> Any:  # noqa: ANN401 - any part of a settings file
        if isinstance(part, dict):
            there = {key: replaced(value) for key, value in part.items()}
            if isinstance(part.get("file"), str):
                there["file"] = files.files.get(part["file"], part["file"])
            return there
        return [replaced(value) for value in part] if isinstance(part, list) else part

    return SceneSettings.model_validate(replaced(settings.model_dump(by_alias=True)))


def _names(settings: SceneSettings) -> dict[str, str]:
    """File name -> path as written, of what each scene must bring: all but ancillary rasters, which they may share."""
    shared = {part.file for part in settings.ancillary.values()}
    return {Path(written).name: written for written in settings.files if written not in shared}


def _found(source: Path, settings: SceneSettings) -> Iterator[SceneFiles]:
    if source.is_dir():
        if (scene := _in_folder(source, settings)) is not None:
            yield scene
            return
        for path in sorted(source.iterdir()):
            if path.is_dir() and (scene := _in_folder(path, settings)) is not None:
                yield scene
            elif path.suffix in {".json", ".geojson"}:
                yield from _in_items(path, settings)
            elif path.is_dir():
                for item in sorted(path.glob("*.json")):
                    yield from _in_items(item, settings)
    elif source.suffix in {".json", ".geojson"}:
        yield from _in_items(source, settings)
    elif source.is_file():
        yield from _in_list(source, settings)
    else:
        raise DataError("there is no such file or folder", where=str(source))


def _in_list(source: Path, settings: SceneSettings) -> Iterator[SceneFiles]:
    try:
        lines = source.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise DataError("this is not a text file with one scene per line", where=str(source)) from error
    for number, line in enumerate(lines, 1):
        written = line.partition("#")[0].strip()
        if not written:
            continue
        path = source.parent / written
        if path == source or not (path.is_dir() or path.suffix in {".json", ".geojson"}):
            what = f"line {number}: {written!r} is neither a folder nor a STAC item"
            raise DataError(what, where=str(source))
        yield from _found(path, settings)


def _in_folder(folder: Path, settings: SceneSettings) -> SceneFiles | None:
    names = _names(settings)
    there = {written: folder / name for name, written in names.items() if (folder / name).is_file()}
    if not there:
        return None
    # A file that is missing is named by the scene when it is opened: the others go on.
    files = {written: str((folder / name).absolute()) for name, written in names.items()}
    return SceneFiles(identifier(folder.absolute().name), str(folder), files)


def _in_items(path: Path, settings: SceneSettings) -> Iterator[SceneFiles]:
    try:
        items = read_items(str(path))
    except DataError:
        if path.suffix == ".json":
            raise
        return
    roles: dict[str, list[str]] = {}
    for role, band in settings.bands.items():
        roles.setdefault(band.file, []).append(role)
    wanted = {
        written: held[0] if len(held := roles.get(written, [])) == 1 else None for written in _names(settings).values()
    }
    for item in items:
        files, problems = item_files(item, str(path), wanted)
        yield SceneFiles(identifier(str(item.get("id", path.stem))), str(path), files, acquired(item), tuple(problems))

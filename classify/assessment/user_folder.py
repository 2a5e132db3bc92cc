"""Results in a folder of the user's choosing, where inputs and files of other programs may lie too.

A record of what was written, with SHA-256, lies beside the results. A file that is not in it, or that was changed
since, is never written over.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from classify.errors import DataError, OutputError, Problem, raise_if_errors
from classify.files import read_json, sha256, write_json, write_text
from classify.lock import writing


def write_results(
    folder: Path, files: Mapping[str, str], record: str, inputs: Sequence[Path] | None = None
) -> list[Path]:
    """Write texts by file name into `folder`, each whole or not at all, and return the paths.

    inputs: the files that the results come from, where the user chose the folder; None for a folder of our own, in
    which nothing is checked. record: name of the file that lists what was written. Before anything is written, every
    target is checked. Raises OutputError naming each that is an input or is not ours.
    """
    with writing(folder):
        return _write(folder, files, record, inputs)


def _write(folder: Path, files: Mapping[str, str], record: str, inputs: Sequence[Path] | None) -> list[Path]:
    targets = [folder / name for name in files]
    if inputs is not None:
        ours = _recorded(folder / record)
        raise_if_errors(_not_ours([*targets, folder / record], ours, record, inputs), OutputError)
        for name in set(ours) - set(files):
            # A table of the run before that this one does not have would be taken for one of its own.
            if (folder / name).is_file() and sha256(folder / name) == ours[name]:
                (folder / name).unlink()
    for target, text in zip(targets, files.values(), strict=True):
        write_text(target, text)
    if inputs is not None:
        write_json(folder / record, {"schema": 1, "files": {target.name: sha256(target) for target in targets}})
    return targets


def _recorded(path: Path) -> dict[str, str]:
    """SHA-256 by file name as recorded; {} where there is no record or the file is something else."""
    if not path.is_file():
        return {}
    try:
        files = read_json(path).get("files")
    except DataError:
        return {}
    if not isinstance(files, dict) or not files:
        return {}
    # Names only: a record that was tampered with cannot point anywhere else.
    return {str(name): str(digest) for name, digest in files.items() if Path(str(name)).name == name}


def _not_ours(targets: Sequence[Path], ours: Mapping[str, str], record: str, inputs: Sequence[Path]) -> list[Problem]:
    problems = []
    for target in targets:
        if not target.exists():
            continue
        if any(given.exists() and target.samefile(given) for given in inputs):
            what = "this input would be overwritten by a result of the same name"
        elif target.name == record:
            what = "" if ours else "this file is not a record of results and would be overwritten"
        elif target.name not in ours:
            what = "this file was not written here and would be overwritten"
        else:
            changed = not target.is_file() or sha256(target) != ours[target.name]
            what = "this file was changed since it was written here and would be overwritten" if changed else ""
        if what:
            problems.append(Problem(what, str(target), "choose another folder for the results; nothing was written"))
    return problems

"""`landassay interpret`: label the drawn sample in the browser, settle disputes, take labels in and out."""

from __future__ import annotations

import getpass
import webbrowser
from pathlib import Path
from typing import TYPE_CHECKING

import click

from classify.cli.common import Call, common_options, refuse_spoken

if TYPE_CHECKING:
    from classify.interpret.export import Export
    from classify.settings import Project


@click.command(
    "interpret",
    help="""Label the drawn sample in the browser, blind to the map. Stop with Ctrl-C: every label is on disk.

    Several people label the same points under their own names; --settle then shows those they disagree on. --export
    writes reference.gpkg with the labels that hold; --import takes in labels made elsewhere.""",
)
@click.option("--interpreter", help="Who labels; the name of this machine's user unless given.")
@click.option("--settle", is_flag=True, help="Show only points that interpreters disagree on.")
@click.option("--export", "export_only", is_flag=True, help="Write reference.gpkg, and stop.")
@click.option("--import", "imported", type=click.Path(path_type=Path), help="Vector file or CSV of labels; stop then.")
@click.option("--id-column", help="Its column of ids, unless 'id'.")
@click.option("--label-column", help="Its column of labels, unless 'observed'.")
@click.option("--untold", multiple=True, help="A label there that means 'could not tell'.")
@click.option("--port", type=click.IntRange(0, 65535), default=0, help="Port of the page; a free one unless given.")
@click.option("--host", default="127.0.0.1", show_default=True, help="Address of this machine that serves the page.")
@click.option("--no-browser", is_flag=True, help="Only print the address.")
@common_options
def command(
    call: Call,
    *,
    interpreter: str | None,
    settle: bool,
    export_only: bool,
    imported: Path | None,
    id_column: str | None,
    label_column: str | None,
    untold: tuple[str, ...],
    port: int,
    host: str,
    no_browser: bool,
) -> None:
    """Serve, import or export."""
    if settle + export_only + (imported is not None) > 1:
        raise click.UsageError("give one of --settle, --export and --import")
    if imported is None:
        refuse_spoken(["id_column", "label_column", "untold"], "only with --import")
    if export_only or imported is not None:
        refuse_spoken(["port", "host", "no_browser"], "not with --export or --import, which serve no page")
    if export_only:
        refuse_spoken(["interpreter"], "not with --export, which takes everyone's labels")
    project = call.project()
    outputs = project.folder / "outputs"
    name = interpreter or _user()
    if imported is not None:
        from classify.interpret.import_labels import columns_from, import_labels

        columns = columns_from({"id": id_column, "label": label_column})
        result = import_labels(project, outputs, imported, name, columns=columns, untold=untold)
        for warning in result.warnings:
            call.warn(f"warning: {warning}")
        call.show(
            {"labels": result.labels, "left_open": result.left_open}, f"{result.labels} labels taken in for {name}"
        )
    if not export_only and imported is None:
        _serve(call, project, outputs, name, settle=settle, host=host, port=port, no_browser=no_browser)
    if imported is None:
        _export(call, project, outputs)


def _serve(
    call: Call, project: Project, outputs: Path, name: str, *, settle: bool, host: str, port: int, no_browser: bool
) -> None:
    from classify.errors import SampleError
    from classify.interpret.pictures import Pictures
    from classify.interpret.serve import listen, serve
    from classify.interpret.session import open_session
    from classify.raster.scene import open_scene

    listening = listen(host, port)
    scene = open_scene(project.scene, project)
    session = open_session(project, outputs, scene.grid, name, "settling" if settle else "interpreter")
    if not session.places:
        raise SampleError("there is nothing to label: " + ("interpreters agree" if settle else "the sample is empty"))
    pictures = Pictures(scene)
    if not listening.is_local:
        call.warn("warning: others on the network can reach this page; whoever has the address first can label, and it "
                  "is not encrypted")  # fmt: skip

    def ready() -> None:
        # Shown even with --quiet: without it the page cannot be opened.
        click.echo(listening.address, err=call.as_json)
        call.warn(f"{len(session.places)} points for {name}; stop with Ctrl-C, every label is on disk")
        if not no_browser:
            webbrowser.open(listening.address)

    try:
        serve(listening, session, pictures, project.project.title, ready)
    except KeyboardInterrupt:
        pass
    finally:
        session.journal.close()


def _export(call: Call, project: Project, outputs: Path) -> None:
    from classify.interpret.export import export_labels

    export = export_labels(outputs, [c.name for c in project.classes])
    call.show(export.to_json(), _text(export))


def _text(export: Export) -> str:
    lines = [", ".join(f"{count} {status}" for status, count in export.counts.items())]
    for pair in export.agreement:
        kappa = pair["kappa"]
        if not pair["points"]:
            lines.append(f"{pair['first']} and {pair['second']} have no labelled point in common")
            continue
        text = f"{pair['first']} and {pair['second']}: {100 * pair['same']:.1f} % the same of {pair['points']} points"
        if kappa["estimate"] is not None:
            text += f", kappa {kappa['estimate']:.2f}"
        if kappa["lower"] is not None:
            text += f" ({kappa['lower']:.2f} to {kappa['upper']:.2f})"
        lines.append(text)
    return "\n".join([*lines, f"written to {export.path}"])


def _user() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        return "interpreter"

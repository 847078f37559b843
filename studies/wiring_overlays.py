"""The commands of ``rollband overlays``: ready-made ones, and what an overlay file means; all without a history."""

from __future__ import annotations

import difflib
import shlex
from pathlib import Path
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

from .wiring import say


class NameOrCommand(TyperGroup):
    """A word that is no command of the group is the name of an overlay, to be shown."""

    def resolve_command(self, ctx: Any, args: list[str]) -> Any:
        """The command that the words ask for; one that is nearly a command is left for the parser to refuse."""
        if args and args[0] not in self.commands and not difflib.get_close_matches(args[0], self.commands):
            args = ["show", *args]
        return super().resolve_command(ctx, args)


app = typer.Typer(
    cls=NameOrCommand,
    invoke_without_command=True,
    subcommand_metavar="[NAME | COMMAND] [ARGS]...",
    rich_markup_mode=None,
    help="""Ready-made overlays to begin with, and what an overlay file means.

With nothing after it: the list of them, each with what it does. With a NAME of the list (or a file of your own): its
text; --copy FILE writes it for you to change, --picture FILE draws what it is worth at expiry.

Then: rollband replay HISTORY --overlay FILE""",
)


@app.callback()
def overlays(ctx: typer.Context) -> None:
    """List them where nothing else is asked."""
    if ctx.invoked_subcommand is None:
        list_them()


@app.command("list")
def list_them() -> None:
    """List the ready-made overlays, each with what it does."""
    from .ready_made import ready_made_lines

    for line in ready_made_lines():
        say(line)
    say("")
    say(
        "rollband overlays NAME prints one, --copy FILE writes it to change, --picture FILE draws its payoff at expiry."
    )


@app.command()
def show(
    name: Annotated[str, typer.Argument(help="A ready-made overlay, or an overlay file of your own (.toml).")],
    copy: Annotated[
        Path | None, typer.Option("--copy", "--out", help="Write it there, for you to change; never over a file.")
    ] = None,
    picture: Annotated[
        Path | None,
        typer.Option(
            "--picture", help="Draw what it is worth at expiry, in an assumed market: FILE.png, .svg or .pdf."
        ),
    ] = None,
) -> None:
    """Print an overlay file, copy it, or draw its payoff at expiry; "overlays NAME" is short for it."""
    from .ready_made import PICTURES, check_free, draw_payoff, overlay_text, write_new

    text = overlay_text(name)
    if copy is None and picture is None:
        typer.echo(text, nl=False)
        return
    if copy is not None:
        check_free(copy)
    if picture is not None:
        if picture.suffix.lower() not in PICTURES:
            raise typer.BadParameter(f"{picture} ends in none of {', '.join(PICTURES)}", param_hint="--picture")
        for line in draw_payoff(name, text, picture):
            say(line)
        say(f"Picture: {picture}")
    if copy is not None:
        write_new(copy, text)
        say(f"Written: {copy}")
        say(f"Next: rollband replay HISTORY --overlay {shlex.quote(str(copy))}")


@app.command()
def check(file: Annotated[Path, typer.Argument(help="Overlay file (TOML).")]) -> None:
    """Say in plain words what an overlay file means, or what is wrong in it (exit code 2)."""
    from .overlay_files import read_overlay_file
    from .overlay_words import overlay_lines

    found = read_overlay_file(file)
    say(f"{file.name}: {found.overlay.name or 'an overlay without a name'}")
    for line in overlay_lines(found):
        say(f"  {line}")

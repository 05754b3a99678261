"""`humbell-sim`: writes recordings of simulated machines."""

from pathlib import Path
from typing import Annotated

import numpy as np
import typer

from humbell_sim.parts import Span
from humbell_sim.tarnholm import RATE_HZ, STORY_S, render

app = typer.Typer(
    help="Makes synthetic signals of faulty machines.",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
)


@app.callback()
def _common() -> None:
    pass


@app.command()
def record(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The recording to write, .npz.")],
    seconds: Annotated[float, typer.Option(min=1, max=3600, help="Length of the recording, s.")] = STORY_S,
    seed: Annotated[int, typer.Option(min=0, help="The same seed gives the same recording.")] = 1,
) -> None:
    """Write a recording of the invented Tarnholm Water works: three channels in g."""
    if file.suffix != ".npz":
        raise typer.BadParameter(f"{file} does not end in .npz (give such a name)")
    signal = render(seed, Span(0, round(seconds * RATE_HZ), RATE_HZ))
    np.savez(file, x=signal, fs=RATE_HZ, unit="g")
    print(f"{file}: {seconds:g} s, {len(signal)} channels at {RATE_HZ:g} Hz")


def main() -> None:
    """Run the command line."""
    app()

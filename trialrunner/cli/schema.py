"""`trialrunner schema`: the JSON Schema of a configuration, for editors that know TOML."""

import json
from pathlib import Path

import click


@click.command("schema")
@click.option(
    "--output",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Write it to this file instead.",
)
def command(output: Path | None) -> None:
    """Print the JSON Schema of a configuration.

    An editor with a TOML language server completes and checks a configuration that begins with
    the line `#:schema ./trialrunner.schema.json`.
    """
    from trialrunner.config import exported_schema

    text = json.dumps(exported_schema(), indent=2, allow_nan=False)
    if output is None:
        click.echo(text)
    else:
        output.write_text(text + "\n", encoding="utf-8")

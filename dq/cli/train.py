"""``dq train``: a sorter from hand labels."""

from __future__ import annotations

import click

from dq.cli.verb import Verb


@click.command(
    "train",
    cls=Verb,
    example="dq train night-demo/site/dq.toml --labels night-demo/site/labels.csv "
    "--model families.model",
    short_help="A family sorter from hand labels, with an honest report.",
)
@click.argument("config")
@click.option(
    "--labels",
    required=True,
    metavar="CSV",
    help="Hand labels: gps_time, channel, family, labeller; optional comment, "
    "confidence.",
)
@click.option("--model", required=True, metavar="OUT", help="Model file to write.")
@click.option(
    "--features",
    default=None,
    metavar="CSV",
    help="Ready feature table of a training set, instead of measuring the data.",
)
def command(config: str, labels: str, model: str, features: str | None) -> int:
    """Train a family sorter and measure it on time that it was not trained on.

    Writes the model to OUT and the report into a folder beside it.
    """
    from dq.cli.outcome import print_training
    from dq.cli.progress import log_to_stderr
    from dq.config import load_config
    from dq.night.train import train

    with log_to_stderr():
        done = train(load_config(config), labels=labels, model=model, features=features)
    print_training(done)
    return 0

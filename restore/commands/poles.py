"""`oncewhere pole`, `stage` and `compare`: rotations between two plates."""

from __future__ import annotations

import click

from restore.commands.options import (
    Age,
    convention_options,
    debug_option,
    history_option,
    print_json,
    radius_option,
    read_history,
)


@click.command()
@click.argument("plate")
@click.option("--relative-to", required=True, metavar="OTHER", help="The plate or frame held still.")
@click.option("--age", "age_ma", required=True, type=Age(), help="Age, Ma.")
@history_option()
@convention_options
@click.option("--json", "as_json", is_flag=True, help="Print values, covariance and ledger as JSON.")
@debug_option
def pole(
    plate: str,
    relative_to: str,
    age_ma: float,
    history_file: str,
    beyond: str,
    latitudes: str,
    as_json: bool,
) -> None:
    """The rotation that turns PLATE from where it is today to where it was, OTHER held still.

    \b
    oncewhere pole ovrath --relative-to quemmel --age 60 --history scenario_files/history.toml
    """
    from restore.geometry.latitudes import Latitudes
    from restore.history.poles import finite_pole, pole_words

    history = read_history(history_file)
    found = finite_pole(history, plate, relative_to, age_ma, beyond, Latitudes(latitudes))
    if as_json:
        print_json(found.as_record())
        return
    click.echo("\n".join([*pole_words([found]), *found.ledger.words()]))


@click.command()
@click.argument("plate")
@click.option("--relative-to", required=True, metavar="OTHER", help="The plate or frame held still.")
@click.option("--from", "from_age", required=True, type=Age(), help="The older age, Ma.")
@click.option("--to", "to_age", required=True, type=Age(), help="The younger age, Ma.")
@click.option(
    "--coordinates", default="relative-to", show_default=True, metavar="relative-to|plate|FRAME",
    help="Whose coordinates the pole is in; for a FRAME, as OTHER stood in it at the younger age.",
)  # fmt: skip
@history_option()
@convention_options
@click.option("--json", "as_json", is_flag=True, help="Print values, covariance and ledger as JSON.")
@debug_option
def stage(
    plate: str,
    relative_to: str,
    from_age: float,
    to_age: float,
    coordinates: str,
    history_file: str,
    beyond: str,
    latitudes: str,
    as_json: bool,
) -> None:
    """The motion of PLATE relative to OTHER from an older to a younger age, forward in time.

    \b
    oncewhere stage ovrath --relative-to quemmel --from 60 --to 40 --history scenario_files/history.toml
    """
    if not from_age > to_age:
        raise click.UsageError(f"--from {from_age:g} --to {to_age:g}: --from is the older age")
    from restore.geometry.latitudes import Latitudes
    from restore.history.poles import pole_words, stage_pole

    history = read_history(history_file)
    found = stage_pole(
        history, plate, relative_to, from_age, to_age, coordinates, beyond, Latitudes(latitudes)
    )
    if as_json:
        print_json(found.as_record())
        return
    click.echo("\n".join([*pole_words([found]), *found.ledger.words(0), *found.ledger.words(1)]))


@click.command()
@click.argument("plate")
@click.option("--relative-to", required=True, metavar="OTHER", help="The plate or frame held still.")
@click.option("--age", "age_ma", required=True, type=Age(), help="Age, Ma.")
@history_option()
@click.option("--with", "other_file", required=True, metavar="FILE", help="The other history.")
@convention_options
@radius_option
@click.option("--json", "as_json", is_flag=True, help="Print the values as JSON.")
@debug_option
def compare(
    plate: str,
    relative_to: str,
    age_ma: float,
    history_file: str,
    other_file: str,
    beyond: str,
    radius_km: float,
    latitudes: str,
    as_json: bool,
) -> None:
    """How far two independent histories differ in the rotation of PLATE, and how surely.

    \b
    oncewhere compare ovrath --relative-to quemmel --age 60 --history a.toml --with b.toml
    """
    from restore.geometry.latitudes import Latitudes
    from restore.history.poles import compare as compare_poles
    from restore.history.poles import finite_pole, pole_words

    kind = Latitudes(latitudes)
    one, other = (
        finite_pole(read_history(file), plate, relative_to, age_ma, beyond, kind)
        for file in (history_file, other_file)
    )
    difference = compare_poles(one, other, radius_km)
    if as_json:
        print_json({"plate": plate, "relative_to": relative_to, "age_ma": age_ma, **difference})
        return
    click.echo("\n".join(pole_words([one, other])))
    click.echo(
        f"they differ by {difference['angle_deg']:.6g} deg, at most {difference['greatest_km']:.6g} km"
        " on the globe"
    )
    if difference["probability"] is None:
        click.echo("whether that is significant cannot be said: an error is not known")
    else:
        click.echo(
            f"probability that errors of rows alone make such a difference: {difference['probability']:.3g}"
        )

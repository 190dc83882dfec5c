"""``pcaptool profile``: check, list, show, schema."""

import click

from pcaptool.cli.errors import told


@click.group()
def profile() -> None:
    """Check, list and show profiles.

    \b
    pcaptool profile check my-radio.toml
    pcaptool profile show merrowdale
    """


@profile.command(no_args_is_help=True)
@click.argument("names", nargs=-1, required=True, metavar="NAME|FILE...")
@click.pass_context
def check(ctx: click.Context, names: tuple[str, ...]) -> None:
    """Check profiles: every key, the worked examples in both directions, and how strong the chain is."""
    from pcaptool.problem import ProfileError, UsageError
    from pcaptool.profile import check_profile, load_profile
    from pcaptool.profile.strength import describe_strength

    wrong = False
    for name in names:
        try:
            loaded = load_profile(name)
            problems = tuple(check_profile(loaded))
        except (ProfileError, UsageError) as error:
            problems = error.problems
        for problem in problems:
            click.echo(str(problem), err=True)
        if not problems:
            n = len(loaded.example)
            click.echo(f"{loaded.origin}: good; {n} worked example{'s' * (n != 1)} decoded and encoded")
            lines, warnings = describe_strength(loaded)
            click.echo("\n".join(lines))
            for warning in warnings:
                click.echo(f"{loaded.origin}: warning: {warning}", err=True)
        wrong |= bool(problems)
    ctx.exit(2 if wrong else 0)


@profile.command("list")
def list_profiles() -> None:
    """List the shipped profiles."""
    from textwrap import fill as wrap

    from pcaptool.profile import load_profile, shipped_profiles

    with told():
        for name, path in shipped_profiles().items():
            click.echo(wrap(load_profile(path).title, 80, initial_indent=f"{name:<28} ", subsequent_indent=" " * 29))


@profile.command(no_args_is_help=True)
@click.argument("name", metavar="NAME|FILE")
@click.option("--toml", is_flag=True, help="Print the file itself.")
def show(name: str, toml: bool) -> None:
    """Show a profile in words: carrier, wrapper, chain and message."""
    from pcaptool.profile import load_profile
    from pcaptool.profile.describe import describe

    with told():
        loaded = load_profile(name)
        click.echo(loaded.text if toml else describe(loaded), nl=not toml)


@profile.command()
def schema() -> None:
    """Print the JSON Schema of profiles, for editors."""
    import json

    from pcaptool.profile.schema import json_schema

    click.echo(json.dumps(json_schema(), indent=2))

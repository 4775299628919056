"""Build the command line from the schema: one click command a verb."""

from __future__ import annotations

import importlib
from collections.abc import Callable
from typing import Any

import click

from realize.commands.common import Context
from realize.schema import EXIT_STATUSES, KINDS, VERBS, Option, Verb, options_of, values


def build_app(arguments: list[str]) -> click.Group:
    """Return the application; only the verb in the arguments is built in full."""
    app = click.Group(
        "realize",
        help="Convert, reduce and fit linear plant models, with a receipt for every result.",
        epilog="Kinds: "
        + ", ".join(KINDS)
        + ".  Exit status: "
        + "; ".join(f"{k} {v}" for k, v in EXIT_STATUSES.items())
        + ".",
        context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    )
    app.params.append(
        click.Option(
            ["--version"], is_flag=True, is_eager=True, expose_value=False, callback=_version, help="print the version"
        )
    )
    for verb in VERBS.values():
        app.add_command(_command(verb))
    return app


def _version(context: click.Context, _: click.Parameter, value: bool) -> None:
    if value:
        from realize._version import __version__

        click.echo(f"realize {__version__}")
        context.exit()


def _command(verb: Verb) -> click.Command:
    parameters: list[click.Parameter] = []
    for name in verb.arguments:
        several = name.endswith("...")
        parameters.append(
            click.Argument([name.rstrip(".").lower()], nargs=-1 if several else 1, required=True, metavar=name)
        )
    parameters += [_option(option) for option in options_of(verb)]
    if verb.makes_model or verb.name in ("report", "demo"):
        what = {
            "report": "picture to write (.png or .svg)",
            "demo": "folder to make; a fresh one in the current folder unless given",
        }.get(verb.name, "file to write; - is standard output")
        parameters.append(click.Option(["-o", "--output", "output"], metavar="OUTPUT", help=what))
    return click.Command(
        verb.name,
        callback=_callback(verb),
        params=parameters,
        help=verb.says,
        short_help=verb.says,
        no_args_is_help=False,
    )


def _option(option: Option) -> click.Option:
    if option.takes == "flag":
        return click.Option([f"--{option.name}", option.keyword], is_flag=True, help=option.says)
    if option.takes == "switch":
        return click.Option(
            [f"--{option.name}/--no-{option.name}", option.keyword], default=option.default, help=option.says
        )
    shown = {"show_default": True} if option.default is not None else {}
    if option.takes == "choice":
        return click.Option(
            [f"--{option.name}", option.keyword],
            type=click.Choice(option.choices),
            default=option.default,
            metavar=option.metavar or None,
            help=option.says + (f"; one of {', '.join(option.choices)}" if option.metavar else ""),
            **shown,
        )
    return click.Option(
        [f"--{option.name}", option.keyword],
        callback=_parsed(option),
        default=option.default,
        metavar=option.metavar or None,
        multiple=option.takes == "limit",
        help=option.says,
        **shown,
    )


def _parsed(option: Option) -> Callable[..., Any]:
    parse = values.PARSERS[option.takes]

    def callback(_: click.Context, parameter: click.Parameter, value: Any) -> Any:
        if value is None or (option.takes == "limit" and not value):
            return {} if option.takes == "limit" else None
        try:
            return parse(value)
        except ValueError as error:
            raise click.BadParameter(str(error), param=parameter) from None

    return callback


def _callback(verb: Verb) -> Callable[..., int]:
    def call(**options: Any) -> int:
        module = importlib.import_module(f"realize.commands.{verb.name.replace('-', '_')}")
        context = Context(
            verb=verb.name,
            json=options.pop("json"),
            log=options.pop("log"),
            output=options.pop("output", None),
            strict=options.pop("strict", False),
            limits=options.pop("limit", {}),
            # None: asked where the claims leave something open
            second_opinion=options.pop("second_opinion", None),
        )
        lines = options.pop("lines", False)
        context.check(lines=lines)
        if lines:
            from realize.commands.lines import execute

            return execute(context, options)
        return module.execute(context, **options)

    return call

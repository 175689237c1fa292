"""The table of verbs: what each is called, where it lives, one line about it. Nothing heavy is imported to show it."""

import importlib
from dataclasses import dataclass

import click

__all__ = ["VERBS", "Verb", "group"]


@dataclass(frozen=True, slots=True)
class Verb:
    """A verb's name, the module whose ``command`` carries it out, and its line in the help."""

    name: str
    module: str
    line: str


VERBS = (
    Verb("begin", "begin", "write board, bench and dialect files to start one's own from"),
    Verb("parts", "parts", "standard-value parts for a wanted band"),
    Verb("predict", "predict", "what boards will be and a bench will say of them, before the first"),
    Verb("rehearse", "rehearse", "the whole job on simulated instruments"),
    Verb("bench", "contact", "walk the dialects of a bench on its instruments, leave it safe"),
    Verb("thru", "thru", "measure the path itself, both probes on one node, for later sweeps"),
    Verb("check", "standard", "measure the bench's check standard, keep its control chart"),
    Verb("sweep", "run", "sweep a board on a real bench, fit, compare, record"),
    Verb("resume", "resume", "go on where a run stopped"),
    Verb("fit", "refit", "fit stored runs again, changing nothing that was measured"),
    Verb("report", "report", "write a stored run as a PDF document"),
    Verb("import", "elsewhere", "fit a response measured elsewhere (CSV); with a board compare it"),
    Verb("verify", "integrity", "tell whether a run file is sound, damaged or altered"),
)


class _Verbs(click.Group):
    """A group that imports a verb's module only when that verb is used."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return [verb.name for verb in VERBS]

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        for verb in VERBS:
            if verb.name == cmd_name:
                module = importlib.import_module(f"bandproof.bench.verbs.{verb.module}")
                command: click.Command = module.command
                return command
        return None

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Verbs"):
            formatter.write_dl([(verb.name, verb.line) for verb in VERBS])

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and self.get_command(ctx, args[0]) is None:
            from bandproof.bench.reading import nearest

            names = [verb.name for verb in VERBS]
            raise click.UsageError(f"no verb {args[0]!r}; known: {', '.join(names)}{nearest(args[0], names)}", ctx)
        return super().resolve_command(ctx, args)


def _show_version(ctx: click.Context, _parameter: click.Parameter, wanted: bool) -> None:
    if wanted and not ctx.resilient_parsing:
        from importlib.metadata import version

        click.echo(f"bandproof {version('bandproof')}")
        ctx.exit()


@click.group(cls=_Verbs, context_settings={"help_option_names": ["-h", "--help"]})
@click.option("--version", is_flag=True, is_eager=True, expose_value=False, callback=_show_version, help="Version.")
def group() -> None:
    """Prove the bands of an equalizer board: sweep, fit, compare with the design, decide, keep the record.

    \b
    First try, nothing connected:   bandproof rehearse
    Your own board:                 bandproof begin my-board

    \b
    Exit codes: 0 pass or done, 1 board fails, 2 bad input or usage,
    3 bench fault, 4 undecided, 5 interrupted (3 and 5 can be resumed)
    """

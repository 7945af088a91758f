"""The command that prints what to cite."""

from pathlib import Path

import click

from trajcage.cli.verbosity import verbosity_options

__all__ = ["command"]


@click.command(name="cite")
@click.argument(
    "result", type=click.Path(path_type=Path), metavar="[FILE]", required=False
)
@click.option("--bibtex", is_flag=True, help="Print BibTeX entries.")
@verbosity_options
def command(*, result: Path | None, bibtex: bool) -> None:
    """Print the citation of trajcage and of what it builds on.

    With a result file also the publications behind the quantities in it and behind the
    equations of state they are compared with; the version is then the one that wrote it.

    \b
      trajcage cite
      trajcage cite cages.h5 --bibtex
    """
    import trajcage
    from trajcage.references import BUILT_ON, PROGRAM, cited_for

    version = trajcage.__version__
    groups = []
    if result is not None:
        from trajcage.store import open_result

        with open_result(result) as opened:
            summary = opened.summary
            names = {*opened.fields, *opened.tables}
            names |= {name.partition("/")[0] for name in opened.arrays}
            version = str(opened.parameters["versions"]["trajcage"])
            diameter = str(opened.parameters["options"]["diameter"])
        if summary:
            names.add("errors of means")
        if diameter.startswith("wca:"):
            names.add("wca diameter")
        equations = summary.get("equations_of_state", [])
        groups = cited_for(names, [str(row["source"]) for row in equations])
    if bibtex:
        articles = [*BUILT_ON, *(a for _, found in groups for a in found)]
        entries = [article.bibtex() for article in dict.fromkeys(articles)]
        click.echo("\n\n".join([PROGRAM.bibtex(version), *entries]))
        return
    groups = [("trajcage and what it builds on", BUILT_ON), *groups]
    blocks = []
    for k, (what, found) in enumerate(groups):
        lines = [PROGRAM.text(version)] if k == 0 else []
        lines += [str(article) for article in found]
        blocks.append("\n".join([what, *(f"  {line}" for line in lines)]))
    click.echo("\n\n".join(blocks))

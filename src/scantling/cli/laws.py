"""`scantling laws`: the error laws, how each is written, and what a stated one implies."""

from __future__ import annotations

import click

from scantling.cli.group import commands


@commands.command()
@click.argument("law", required=False)
@click.option("--json", "as_json", is_flag=True, help="Print JSON, not text.")
def laws(law: str | None, as_json: bool) -> int:
    """List the error laws, or say what LAW implies, such as student-t:df=5."""
    from scantling.cli.output import print_report
    from scantling.law.facts import families, law_facts
    from scantling.report.law_text import (
        facts_json,
        families_json,
        render_facts,
        render_families,
    )

    if law is None:
        listed = families()
        text = families_json(listed) if as_json else render_families(listed)
    else:
        facts = law_facts(law)
        text = facts_json(facts) if as_json else render_facts(facts)
    print_report(text, plain=True)
    return 0

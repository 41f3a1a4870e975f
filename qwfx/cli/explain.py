"""``qwfx explain``: the page of a rule."""

from __future__ import annotations

import click

from qwfx.errors import UnsupportedError

__all__ = ["command"]


@click.command("explain")
@click.argument("rule", required=False)
def command(rule: str | None) -> None:
    """Print the page of RULE: what it checks, why it matters, an example that fails and a near one that passes.

    Without RULE, list the rules.
    """
    from qwfx.rules import all_rules, rule_page

    rules = {r.name: r for r in all_rules()}
    if rule is None:
        width = max(map(len, rules))
        tier = ""
        for r in rules.values():
            if r.tier != tier:
                tier = r.tier
                click.echo(("" if r is next(iter(rules.values())) else "\n") + click.style(tier, bold=True))
            click.echo(f"  {r.name:{width}}  {r.severity.value:8} {r.summary}")
        return
    if rule not in rules:
        from difflib import get_close_matches

        near = get_close_matches(rule, rules, n=3, cutoff=0.4)
        raise UnsupportedError(
            f"no rule is called {rule!r}",
            where="explain",
            expected=f"perhaps {' or '.join(near)}" if near else "the name of a rule",
            remedy="`qwfx explain` lists the rules",
        )
    click.echo(rule_page(rule).rstrip())

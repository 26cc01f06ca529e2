"""duskcheck rules: are the rules fit, and what do they say."""

from __future__ import annotations

from pathlib import Path

import click

from monitor.cli.options import json_option, print_json, site_option
from monitor.limits.rules import read_rules
from monitor.limits.wording import sentence
from monitor.notices.figures import count
from monitor.site import open_site


@click.group()
def rules() -> None:
    """The limit rules: check that they can be used, show what they say."""


@rules.command("check")
@site_option
@json_option
@click.argument("files", nargs=-1, type=click.Path(path_type=Path, exists=True, dir_okay=False))
def check_rules(site_file: Path, as_json: bool, files: tuple[Path, ...]) -> None:
    """Read the site's rules, or the FILES given in their place, and name everything that is wrong with them."""
    site = open_site(site_file)
    given = [(str(file), file.read_bytes()) for file in files] or list(site.rule_files)
    found = read_rules(given, site.settings.rule_context())
    if as_json:
        print_json({"files": [name for name, _ in given], "rules": [rule.id for rule in found]})
    else:
        click.echo(f"{count(len(found), 'rule')} in {count(len(given), 'file')}: nothing wrong")


@rules.command("show")
@site_option
@json_option
def show_rules(site_file: Path, as_json: bool) -> None:
    """Every rule of the site in one sentence."""
    site = open_site(site_file)
    found = read_rules(site.rule_files, site.settings.rule_context())
    if as_json:
        print_json(
            [
                {
                    "rule": rule.id,
                    "title": rule.title,
                    "sentence": sentence(rule),
                    "file": rule.file,
                    "line": rule.line,
                    "because": rule.because,
                    "owner": rule.owner,
                    "tell": list(rule.tell),
                }
                for rule in found
            ]
        )
        return
    for rule in found:
        click.echo(f"{rule.title} ({rule.file}:{rule.line})\n  {sentence(rule)}")
        if rule.because:
            click.echo(f"  because: {rule.because}")

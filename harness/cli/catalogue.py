"""`bitassay patterns`, `drivers` and `profile schema`: what there is to choose from."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from harness.cli.output import print_json

if TYPE_CHECKING:
    from drivers.keys import Key
    from drivers.registry import Card

TYPE_COLUMNS = 28


def patterns(*, as_json: bool) -> int:
    """List the patterns."""
    from harness.signal.patterns import known_patterns

    rows = [
        {
            "name": row.name,
            "stages": list(row.taps),
            "bits": row.period,
            "inverted": row.sent_inverted,
            "longest_zeros": row.longest_zeros,
            "source": row.source,
        }
        for row in known_patterns()
    ]
    if as_json:
        print_json({"schema": 1, "patterns": rows})
        return 0
    print(f"{'name':<8} {'stages added':<14} {'bits':>13}  {'inverted':<8} {'ZEROs':>5}  source")
    for r in rows:
        stages = ", ".join(str(s) for s in r["stages"])  # type: ignore[attr-defined]
        sent = "yes" if r["inverted"] else "no"
        bits = f"{r['bits']:,}".replace(",", " ")
        print(f"{r['name']:<8} {stages:<14} {bits:>13}  {sent:<8} {r['longest_zeros']:>5}  {r['source']}")
    print()
    print("Each also as NAME-reversed (reversed in time), NAME-inverted, NAME-reversed-inverted.")
    print("taps:A,B,…         a register of your own: these stages are added")
    print("word:1010          a fixed word, first bit first; word:0xA5 in hexadecimal, highest bit first")
    print("bernoulli:S[:SEED] independent bits with a share S of ONEs")
    print("file:PATH          the bytes of a file, over and over")
    return 0


def drivers(name: str | None, *, as_json: bool) -> int:
    """List the drivers, or show one's keys."""
    from drivers import registry

    if name is None:
        listing = {kind: list(registry.names(kind)) for kind in registry.BUILT_IN}
        if as_json:
            print_json({"schema": 1, "drivers": listing})
            return 0
        for kind, known in listing.items():
            print(f"{kind:<12} {', '.join(known) if known else 'none'}")
        print("`bitassay drivers NAME` shows a driver's keys")
        return 0
    card = _card(name)
    if as_json:
        keys = [
            {
                "name": key.name,
                "type": key.type,
                "required": key.required,
                "default": key.default,
                "description": key.description,
                "only_with": key.only_with,
            }
            for key in card.keys
        ]
        print_json({"schema": 1, "kind": card.kind, "driver": card.name, "origin": card.origin, "keys": keys})
        return 0
    print(f"{card.name} ({card.kind}, {card.origin}): {card.summary}")
    heading = ""
    for key in _grouped(card.keys):
        group = f"{key.name.rpartition('.')[0]} with {key.only_with}:" if key.only_with else ""
        if group and group != heading:
            print(f"\n  {group}")
        elif heading and not group:
            print()
        heading = group
        default = "required" if key.required else f"default {key.default}" if key.default else "optional"
        name = f"  {key.name.rpartition('.')[2]}" if group else key.name
        if len(key.type) > TYPE_COLUMNS:
            print(f"  {name:<24} {key.type}")
            print(f"  {'':<24} {'':<{TYPE_COLUMNS}} {default}")
        else:
            print(f"  {name:<24} {key.type:<{TYPE_COLUMNS}} {default}")
        if key.description:
            print(f"  {'':<24} {key.description}")
    return 0


def _grouped(keys: Sequence[Key]) -> Iterator[Key]:
    """Give keys in their order; one that all alternatives have alike comes once, before them."""
    alternatives = {(key.name.rpartition(".")[0], key.only_with) for key in keys if key.only_with}
    choices = Counter(where for where, _ in alternatives)
    alike = Counter(replace(key, only_with="") for key in keys if key.only_with)
    shared = {
        key for key, times in alike.items() if times == choices[key.name.rpartition(".")[0]] and times > 1
    }
    said: set[str] = set()
    for key in keys:
        where = key.name.rpartition(".")[0]
        if key.only_with and where not in said:
            said.add(where)
            chooser = key.only_with.partition(" = ")[0]
            for common in alike:
                if common in shared and common.name.rpartition(".")[0] == where:
                    yield replace(common, only_with=f"any {chooser}")
        if replace(key, only_with="") not in shared or not key.only_with:
            yield key


def _card(name: str) -> Card:
    """Find a driver among all kinds; the last kind's complaint names the nearest."""
    from drivers import registry

    for kind in registry.BUILT_IN:
        if name in registry.names(kind):
            return registry.describe(kind, name)
    return registry.describe("links", name)


def schema() -> int:
    """Print the profile's JSON schema."""
    from harness.profile import profile_schema

    print_json(profile_schema())
    sys.stdout.flush()
    return 0

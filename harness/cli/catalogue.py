"""`bitassay patterns`, `drivers` and `profile schema`: what there is to choose from."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING

from harness.cli.output import print_json

if TYPE_CHECKING:
    from drivers.registry import Card


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
    for key in card.keys:
        default = "required" if key.required else f"default {key.default}" if key.default else "optional"
        print(f"  {key.name:<24} {key.type:<28} {default}")
        about = " · ".join(words for words in (key.only_with, key.description) if words)
        if about:
            print(f"  {'':<24} {about}")
    return 0


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

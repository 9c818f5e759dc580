"""Cautions, lines to sign on, versions and host, the profile as given, and the digests."""

from __future__ import annotations

from harness.assess.words import iso
from harness.report.document import Entries, Entry, Listing, Paragraph, Section, Signatures, Verbatim
from harness.report.material import Material
from harness.report.phrases import moment

_CAUTIONS = (
    "Transmitting: connect an attenuator or a dummy load before anything is keyed. Radiating may need a licence; "
    "which level, channel and duty are permitted is for the licence and local rules to say.",
    "Receivers: too much power at the port destroys them. Work out the level at the port with every loss before "
    "connecting, and keep to the device's data sheet.",
    "Lasers: never look into a fibre or a connector, and take every fibre as live. Follow the laser class and "
    "local rules.",
    "Mains: leave work on mains wiring to people who are qualified for it.",
)
_DEFER = (
    "These are reminders and no safety instruction: local rules, the device's documents and licensed practice "
    "come first."
)


def cautions_section() -> Section:
    """Give the usual cautions for repeating this measurement."""
    return Section("Cautions", (Listing(_CAUTIONS), Paragraph(_DEFER, "aside")))


def signature_section(material: Material) -> Section:
    """Give lines to sign on."""
    device = material.run.device
    roles = (
        ("measured by", device.get("operator", "")),
        ("checked by", ""),
        ("accepted by", device.get("customer", "")),
    )
    text = "Signed for the unit and the record named in this report, whose digests stand in its last section."
    return Section("Signatures", (Paragraph(text, "aside"), Signatures(roles)))


def versions_section(material: Material) -> Section:
    """Say with what and on which computer it was measured, and what wrote this report."""
    entries = []
    several = len(material.run.sittings) > 1
    for sitting in material.run.sittings:
        host = sitting.host
        where = [str(host.get("name", "unnamed"))]
        where += [str(host[key]) for key in ("platform",) if host.get(key)]
        versions = ", ".join(f"{name} {version}" for name, version in sitting.versions.items())
        label = f"sitting {sitting.index + 1}" if several else "computer"
        until = f"{iso(sitting.started)} to {iso(sitting.ended) or 'its cut'}"
        lines = (", ".join(where), versions or "versions not recorded", *((until,) if several else ()))
        entries.append(Entry(label, lines))
    entries.append(Entry("this report", (f"written by {material.program}, {moment(material.written)}",)))
    return Section("Versions and computer", (Entries(tuple(entries)),))


def record_digest(material: Material) -> str:
    """Give the record's SHA-256, or why there is none."""
    if material.kept_digest:
        return material.kept_digest
    return "none yet: it is made when a run ends"


def digests_section(material: Material) -> Section:
    """Give the digests, how to check them, and the profile as given."""
    if material.broken:
        state = "THE RECORD DOES NOT HOLD: " + "; ".join(material.broken)
    elif material.kept_digest is None:
        state = "the run has not ended, so no digest was kept"
    else:
        state = "computed again when this report was written: it holds"
    entries = (
        Entry("record, SHA-256", (record_digest(material), state), "against" if material.broken else "plain"),
        Entry("profile, SHA-256", (material.profile_digest, "of the text below, as given")),
        Entry("to check", (f"bitassay verify {material.run.key}", "derives every number again")),
    )
    blocks = [Entries(entries)]
    if not material.run.profile_text.strip():
        return Section("Record and profile", (*blocks, Paragraph("The run had no profile.")))
    return Section("Record and profile", (*blocks, Verbatim(material.run.profile_text.rstrip("\n"))))

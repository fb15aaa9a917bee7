"""The cautions that travel with every output that leaves the tool."""

CAUTIONS: tuple[str, ...] = (
    "Engineering aid, not an approval: the numbers hold for the model in the problem file and only as far as it "
    "describes the plant.",
    "Local codes, the functional-safety procedure of the site and the judgement of the licensed engineer in charge "
    "take precedence.",
    "Commission in steps, with independent protection (brakes, trips, relief) that does not depend on these gains.",
    "Gains are for the sign convention u = K y written beside them; a turned sign or a wrong unit can destabilise the "
    "plant.",
)


def cautions_text() -> str:
    """The cautions as lines of plain text, each with a leading dash."""
    return "\n".join(f"- {line}" for line in CAUTIONS)

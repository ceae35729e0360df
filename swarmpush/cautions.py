"""What every answer must be read with."""

CAUTIONS = (
    "These are predictions of a model, made from the scenario's numbers. They are no certificate and no safety proof.",
    "Moving machines pinch and catch; batteries, magnets and lasers can injure. Local laboratory and workplace rules "
    "and qualified staff decide what may be run.",
    "Not for use in or on people or animals, and not for clinical decisions.",
)

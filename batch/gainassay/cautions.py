"""Cautions that are shown wherever a verdict could be taken for more than it is."""

CAUTIONS = (
    "Verdicts are only as good as the data sheets their numbers come from, over the conditions these state.",
    "A pass is no release for production: prototypes, the manufacturer's current data sheet and the responsible "
    "engineer's sign-off decide.",
    "Where a stage guards people or plant, the applicable safety standard and local codes come first.",
)

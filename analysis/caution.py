"""What the figures are not for."""

CAUTION = (
    "For planning only, not for decisions on a patient or a live bed. Results depend on the data and the "
    "assumptions of the scenario; local protocols and licensed clinicians decide."
)

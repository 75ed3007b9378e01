"""The one error that `dsp` raises for what a caller gave it."""


class DspError(ValueError):
    """An argument that cannot be used; the text names it, the rule it breaks and the value received."""

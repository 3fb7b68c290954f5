"""The base of every stage's parameters."""

from pydantic import BaseModel, ConfigDict


class Params(BaseModel):
    """Parameters of a stage: frozen, strict, finite, nothing unknown, every field described.

    A field's type carries its unit (`Hertz`, `Seconds`, `Share`, `Decibel`, `SignalAmount`), so
    ``Params(high_pass="0.5 Hz")`` is the only way to give a value, in a recipe or in a test.
    """

    model_config = ConfigDict(
        frozen=True,
        extra="forbid",
        strict=True,
        allow_inf_nan=False,
        validate_default=False,
        use_attribute_docstrings=False,
    )

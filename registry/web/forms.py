"""The forms of the pages. A form keeps what was typed, and a refusal lands beside the field that it names."""

from __future__ import annotations

import math
from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any, TypeVar, cast

from wtforms import (
    DateTimeLocalField,
    Field,
    FloatField,
    Form,
    PasswordField,
    RadioField,
    SelectField,
    StringField,
    TextAreaField,
)
from wtforms.validators import InputRequired, Length, Optional, ValidationError
from wtforms.widgets import TextInput

from registry.domain.maintenance import MAINTENANCE_WORDS, Side
from registry.domain.vehicle import Parameters
from registry.errors import Conflict, FieldError, Invalid, NotAllowed, NothingInForce, NotObserved, Refusal

T = TypeVar("T")

#: What a person can put right in the form, or must at least read there.
_ANSWERED_HERE = (Invalid, Conflict, NotAllowed, NothingInForce, NotObserved)

REQUIRED = "Write something here."


class Posted(Form):
    """A form of ours: ``problem`` is what went wrong with the whole of it, ``key`` keeps its ids apart on a page."""

    problem: str | None = None
    key = "form"

    def __init__(self, formdata: Any = None, *, key: str | None = None, **kwargs: Any) -> None:
        super().__init__(formdata, **kwargs)
        for field in self:
            field.id = f"{key or self.key}-{field.name}"
            field.label.field_id = field.id

    def attempt(self, deed: Callable[[], T]) -> T | None:
        """Do ``deed`` when every field is well-formed.

        Parameters
        ----------
        deed
            Calls one procedure with the fields of this form.

        Returns
        -------
        object or None
            What the procedure answered; None when the form must be shown again, with what is wrong beside its fields.
        """
        if not self.validate():
            return None
        try:
            return deed()
        except _ANSWERED_HERE as refusal:
            self._refuse(refusal)
            return None

    def _refuse(self, refusal: Refusal) -> None:
        elsewhere = [refusal.detail]
        for error in refusal.errors:
            name = error.pointer.rsplit("/", 1)[-1]
            if name in self:
                self[name].errors = [*self[name].errors, error.detail]
                elsewhere = []
            else:
                elsewhere.append(error.detail)
        self.problem = " ".join(dict.fromkeys(elsewhere)) or None


def positive(_form: Form, field: Field) -> None:
    """Let a finite number above 0 pass.

    Raises
    ------
    ValidationError
        Any other.
    """
    if field.data is not None and not (math.isfinite(field.data) and field.data > 0.0):
        raise ValidationError("Write a number above 0.")


class NumberField(FloatField):
    """A number as people write it: with a point or a comma."""

    def process_formdata(self, valuelist: list[str]) -> None:
        """Read the number.

        Raises
        ------
        ValueError
            It is none; the sentence says how to write one.
        """
        if not valuelist or not valuelist[0].strip():
            return
        try:
            self.data = float(valuelist[0].strip().replace(",", "."))
        except ValueError as error:
            self.data = None
            raise ValueError("Write a number with a decimal point, such as 0.3477.") from error


class UtcField(DateTimeLocalField):
    """A moment in UTC to the minute."""

    def process_formdata(self, valuelist: list[Any]) -> None:
        """Read the moment and give it its zone.

        Raises
        ------
        ValueError
            It is none; the sentence says how to write one.
        """
        if not valuelist or not str(valuelist[0]).strip():
            return
        try:
            super().process_formdata(valuelist)
        except ValueError as error:
            raise ValueError("Write a day and a time, such as 2031-04-30 14:05.") from error
        if self.data is not None:
            self.data = self.data.replace(tzinfo=UTC)


def _reason() -> TextAreaField:
    return TextAreaField("Reason", [InputRequired(REQUIRED), Length(max=2000)])


def _note() -> TextAreaField:
    return TextAreaField("Note", [Optional(), Length(max=2000)], filters=[_or_none])


def _or_none(text: str | None) -> str | None:
    return text.strip() or None if text is not None else None


def _measure(label: str) -> NumberField:
    return NumberField(label, [InputRequired("Write a number."), positive], widget=TextInput(), render_kw=_DIGITS)


_DIGITS = {"inputmode": "decimal", "autocomplete": "off"}


class SignInForm(Posted):
    """Who is there."""

    key = "sign-in"
    name = StringField("Name", [InputRequired("Write your name.")], render_kw={"autocomplete": "username"})
    password = PasswordField(
        "Password", [InputRequired("Write your password.")], render_kw={"autocomplete": "current-password"}
    )


class AdoptionForm(Posted):
    """Put a calibration into force."""

    key = "adoption"
    reason = _reason()
    in_force_from = UtcField("In force from (UTC)", [Optional()])


class WithdrawalForm(Posted):
    """Take a calibration back, and say what holds next."""

    key = "withdrawal"
    reason = _reason()
    then = RadioField(
        "What holds next",
        choices={"nothing": "Nothing: the vehicle stands still", "reinstate": "An earlier calibration again"},
        default="nothing",
    )
    number = SelectField("Earlier calibration", [Optional()], coerce=int, validate_choice=False)

    @property
    def reinstated_number(self) -> int | None:
        """The earlier calibration to reinstate, where one was chosen."""
        return self.number.data if self.then.data == "reinstate" else None


class BaselineForm(Posted):
    """Fit the usable runs and propose the outcome."""

    key = "baseline"
    note = _note()


class EnteredForm(Posted):
    """Propose values that were measured elsewhere, or provisional ones."""

    key = "entered"
    kind = RadioField(
        "Origin",
        choices={
            "provisional": "Provisional: enough to drive calibration runs with",
            "entered": "Measured elsewhere",
        },
        default="provisional",
    )
    left_mm_per_tick = _measure("Left, mm per tick")
    right_mm_per_tick = _measure("Right, mm per tick")
    width_mm = _measure("Effective width, mm")
    u_left_mm_per_tick = _measure("u of left, mm per tick")
    u_right_mm_per_tick = _measure("u of right, mm per tick")
    u_width_mm = _measure("u of width, mm")
    note = _note()

    @property
    def parameters(self) -> Parameters:
        """The values in metres."""
        left, right, width = (
            field.data or 0.0 for field in (self.left_mm_per_tick, self.right_mm_per_tick, self.width_mm)
        )
        return Parameters(left * 1e-3, right * 1e-3, width * 1e-3)

    @property
    def u_m(self) -> tuple[float, float, float]:
        """Their standard uncertainties in metres."""
        left, right, width = (
            field.data or 0.0 for field in (self.u_left_mm_per_tick, self.u_right_mm_per_tick, self.u_width_mm)
        )
        return left * 1e-3, right * 1e-3, width * 1e-3


class MaintenanceForm(Posted):
    """Record work done on the vehicle."""

    key = "maintenance"
    kind = SelectField("What was done", choices={str(kind): words for kind, words in MAINTENANCE_WORDS.items()})
    side = SelectField(
        "Side",
        choices={"": "not one side", "left": "left", "right": "right", "both": "both"},
    )
    done_at = UtcField("Done at (UTC)", [InputRequired("Write when it was done.")])
    note = _note()

    @property
    def chosen_side(self) -> Side | None:
        """The side that was worked on, where one was chosen."""
        return cast("Side | None", self.side.data or None)

    @property
    def moment(self) -> datetime:
        """When it was done.

        Raises
        ------
        Invalid
            The form does not say.
        """
        if self.done_at.data is None:
            raise Invalid(REQUIRED, (FieldError("/done_at", REQUIRED),))
        return self.done_at.data


class ReasonForm(Posted):
    """Do something that needs only a reason."""

    key = "reason"
    reason = _reason()


class NoteForm(Posted):
    """Acknowledge, with what was seen or decided."""

    key = "note"
    note = TextAreaField("Note", [InputRequired(REQUIRED), Length(max=2000)])

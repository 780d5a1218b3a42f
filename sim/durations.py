"""Lengths of stay and transfer delays as the file gives them: `{ family = "...", ... }`.

The same families serve both; a stay names its numbers in days (`mean_days`, `rates_per_day`), a delay in
hours (`mean_hours`, `rates_per_hour`). A new family is declared here (its keys) and in `sim/stays.py` (its
quantile function).
"""

from __future__ import annotations

import csv
import hashlib
import io
import unicodedata
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Discriminator, Field, PrivateAttr, Tag, ValidationInfo, create_model, model_validator

from sim import stays
from sim.tables import NotNegative, Positive, Row, Share, Table, breach
from sim.wording import nearest

MOST_STAGES = 200
MOST_BYTES = 200_000_000
LONGEST = 36_500.0  # of days, or of hours

Mean = Annotated[Positive, Field(le=LONGEST)]
Rate = Annotated[Positive, Field(ge=1e-4, le=1e6)]
Cv = Annotated[float, Field(ge=0.001, le=20, examples=["cv = 1.4"])]


def _key_in(unit: str):
    """How the file writes a field's name where its numbers are in `unit`."""
    written = {"mean": f"mean_{unit}", "rates": f"rates_per_{unit.removesuffix('s')}"}
    return lambda name: written.get(name, name)


class Duration(Table):
    """A distribution of a time, its numbers in days (of hours in the variants for delays)."""

    model_config = {"alias_generator": _key_in("days")}

    def distribution(self) -> stays.Distribution:
        """The distribution as `sim.stays` computes with it, in the unit that the keys name."""
        numbers = [value for name, value in self if name not in ("family", "weight")]
        return getattr(stays, self.family.capitalize())(*numbers)  # type: ignore[attr-defined]


class Constant(Duration):
    """Always the same time; 0 is legal."""

    family: Literal["constant"]
    mean: Annotated[NotNegative, Field(le=LONGEST)]


class Exponential(Duration):
    """The memoryless family, the exact chain's own."""

    family: Literal["exponential"]
    mean: Mean


class Erlang(Duration):
    """The sum of equal exponential stages."""

    family: Literal["erlang"]
    mean: Mean
    stages: Annotated[int, Field(ge=1, le=MOST_STAGES, examples=["stages = 3"])]


class Gamma(Duration):
    """Gamma by mean and coefficient of variation."""

    family: Literal["gamma"]
    mean: Mean
    cv: Cv


class Weibull(Duration):
    """Weibull by mean and coefficient of variation."""

    family: Literal["weibull"]
    mean: Mean
    cv: Cv


class Lognormal(Duration):
    """Lognormal by mean and coefficient of variation."""

    family: Literal["lognormal"]
    mean: Mean
    cv: Cv


class Hyperexponential(Duration):
    """Two exponential phases with balanced means."""

    family: Literal["hyperexponential"]
    mean: Mean
    cv: Annotated[Cv, Field(ge=1)]


class Coxian(Duration):
    """Phases in a row, each left at its rate, with a chance to go on to the next."""

    family: Literal["coxian"]
    rates: Annotated[tuple[Rate, ...], Row, Field(min_length=1, max_length=MOST_STAGES)]
    goes_on: Annotated[tuple[Share, ...], Row, Field(max_length=MOST_STAGES, examples=["goes_on = [0.4]"])]

    @model_validator(mode="after")
    def _lengths_match(self):
        if len(self.goes_on) != len(self.rates) - 1:
            raise breach(
                "needs one entry fewer than the rates (a patient may go on after every phase but the last)",
                len(self.goes_on),
                f"give {len(self.rates) - 1}",
                key=("goes_on",),
            )
        return self


class Empirical(Duration):
    """Observed times in one column of a CSV file; the file is read when the scenario is."""

    family: Literal["empirical"]
    file: Annotated[str, Field(min_length=1, examples=['file = "stays.csv"'])]
    column: Annotated[str, Field(min_length=1, examples=['column = "days"'])]
    _values: tuple[float, ...] = PrivateAttr(())
    _sha256: str = PrivateAttr("")

    @model_validator(mode="after")
    def _read(self, info: ValidationInfo):
        folder = Path((info.context or {}).get("folder", ""))
        self._values, self._sha256 = read_column(folder / self.file, self.column)
        return self

    def distribution(self) -> stays.Distribution:
        """The observed times, each as likely as it is frequent."""
        return stays.Empirical(values=self._values)

    @property
    def sha256(self) -> str:
        """The hash of the data file's bytes."""
        return self._sha256

    @property
    def values(self) -> tuple[float, ...]:
        """The observed times, in file order."""
        return self._values

    def with_values(self, values: tuple[float, ...]) -> Empirical:
        """The same column with other observed times: a resampling of them."""
        copy = self.model_copy()
        copy._values = tuple(values)
        return copy


def read_column(path: Path, column: str) -> tuple[tuple[float, ...], str]:
    """The numbers of one CSV column in file order, and the file's SHA-256; a breach where one is no stay."""
    content = _content(path)
    try:
        text = unicodedata.normalize("NFC", content.decode("utf-8-sig"))
        reader = csv.reader(io.StringIO(text, newline=""), strict=True)
        rows = [(reader.line_num, row) for row in reader]
    except (UnicodeDecodeError, csv.Error) as error:
        raise breach(
            "must be a CSV file in UTF-8",
            f"{path.name!r} ({error})",
            "save it again as CSV in UTF-8",
            key=("file",),
        ) from None
    return _numbers(rows, path.name, column), hashlib.sha256(content).hexdigest()


def _content(path: Path) -> bytes:
    """The bytes of a regular file; a pipe or a device might never end."""
    try:
        if not path.exists() or path.is_file():
            with path.open("rb") as opened:
                content = opened.read(MOST_BYTES + 1)
            reason = f"larger than {MOST_BYTES:,} bytes"
            if len(content) <= MOST_BYTES:
                return content
        else:
            reason = "not a file"
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
    remedy = "correct the path (it is relative to the scenario file) or put the file there"
    raise breach(
        "must name a CSV file that can be read", f"{str(path)!r} ({reason.lower()})", remedy, key=("file",)
    ) from None


def _numbers(rows: list[tuple[int, list[str]]], file: str, column: str) -> tuple[float, ...]:
    """The column below the header in line 1. Blank lines may end the file; elsewhere they are no stay."""
    header = [name.strip() for name in rows[0][1]] if rows else []
    if header.count(column) != 1:
        remedy = _column_remedy(column, header)
        raise breach(f"must name one column of {file}", repr(column), remedy, key=("column",))
    place = header.index(column)
    while not rows[-1][1]:
        rows.pop()
    texts = [(line, row[place].strip() if place < len(row) else "") for line, row in rows[1:]]
    bad = [f"line {line}: {text!r}" for line, text in texts if _number(text) is None]
    if bad:
        said = "; ".join(bad[:3]) + (f"; and {len(bad) - 3:,} more" if len(bad) > 3 else "")
        raise breach(
            f"every entry of column {column!r} of {file} must be a number from 0 to {LONGEST:,.0f}", said,
            "mend or remove those rows", key=("column",),
        )  # fmt: skip
    if not texts:
        raise breach(
            f"column {column!r} of {file} must hold at least one number", "none", "add rows", key=("column",)
        )
    return tuple(_number(text) for _, text in texts)


def _column_remedy(column: str, header: list[str]) -> str:
    if column in header:
        return "several columns bear this name; rename all but one"
    if len(header) == 1 and (";" in header[0] or "\t" in header[0]):
        return "separate the columns by commas, not by semicolons or tabs"
    return nearest(column, filter(None, header))


def _number(text: str) -> float | None:
    """The duration that a CSV entry stands for; None where it is none."""
    try:
        number = float(text)
    except ValueError:
        return None
    return number if 0 <= number <= LONGEST and "_" not in text else None


FAMILIES = (Constant, Exponential, Erlang, Gamma, Weibull, Lognormal, Hyperexponential, Coxian, Empirical)


class Mixture(Duration):
    """Several families, each with its weight; the parts' type depends on the unit (see `_duration`)."""

    family: Literal["mixture"]

    def distribution(self) -> stays.Distribution:
        """The mixture of the parts' distributions."""
        return stays.Mixture(parts=tuple((part.weight, part.distribution()) for part in self.parts))

    @model_validator(mode="after")
    def _some_weight(self):
        if not any(part.weight > 0 for part in self.parts):
            raise breach(
                "must give at least one part a weight above 0", "only 0", "raise one", key=("parts",)
            )
        return self


Observed = dict[tuple[str, str], tuple[float, ...]]  # (file, column) -> the observed times


def observed(duration: Duration | None) -> Observed:
    """The records that a duration is taken from; none where it is a family with parameters."""
    if isinstance(duration, Empirical):
        return {(duration.file, duration.column): duration.values}
    parts = duration.parts if isinstance(duration, Mixture) else ()
    return {key: values for part in parts for key, values in observed(part).items()}


def with_observed(duration: Duration, records: Observed) -> Duration:
    """The same duration taken from other records, by file and column."""
    if isinstance(duration, Empirical):
        return duration.with_values(records[duration.file, duration.column])
    if isinstance(duration, Mixture):
        parts = tuple(with_observed(part, records) for part in duration.parts)
        return duration.model_copy(update={"parts": parts})
    return duration


def _variant(family: type[Duration], name: str, unit: str, **keys: Any) -> type[Duration]:
    """The family with its numbers in `unit`, and perhaps more keys."""
    in_unit = type(
        name, (family,), {"model_config": {"alias_generator": _key_in(unit)}, "__module__": __name__}
    )
    made = create_model(name, __base__=in_unit, __module__=__name__, **keys) if keys else in_unit
    return globals().setdefault(name, made)  # found again by name when a scenario goes to a worker process


def _one_of(models: dict[str, type[Duration]]) -> Any:
    """One of the models, told apart by its `family`."""
    union: Any = None
    for family, model in models.items():
        tagged = Annotated[model, Tag(family)]
        union = tagged if union is None else union | tagged
    return Annotated[union, Discriminator("family")]


def _duration(unit: str) -> Any:
    """The type of a duration whose keys name `unit`."""
    weight = (Annotated[NotNegative, Field(le=1e6, examples=["weight = 0.3"])], ...)
    models, parts = {}, {}
    for family in FAMILIES:
        word = family.__name__.lower()
        models[word] = _variant(family, f"{family.__name__}In{unit.capitalize()}", unit)
        parts[word] = _variant(family, f"{family.__name__}PartIn{unit.capitalize()}", unit, weight=weight)
    example = f'parts = [{{ family = "exponential", mean_{unit} = 3.9, weight = 1 }}]'
    several = (
        Annotated[tuple[_one_of(parts), ...], Row, Field(min_length=1, max_length=50, examples=[example])],
        ...,
    )
    models["mixture"] = _variant(Mixture, f"MixtureIn{unit.capitalize()}", unit, parts=several)
    return _one_of(models)


Stay = _duration("days")
Delay = _duration("hours")


def exponential_stay(mean_days: float) -> Duration:
    """An exponential stay of that mean; where the mean is 0 a constant one, which is the same thing."""
    if mean_days > 0:
        return Exponential.model_construct(
            family="exponential", mean=mean_days
        )  # whatever a coxian adds up to
    return Constant(family="constant", mean_days=0.0)

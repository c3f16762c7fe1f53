"""The ``sample:`` section of a config, validated."""

from __future__ import annotations

from collections import Counter
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from fitter.sample.uncertainty import AnyTerm
from fitter.sample.uncertainty.base import ColumnRef, PathText, is_free
from fitter.sample.uncertainty.covariance_scale import CovarianceScale
from fitter.sample.uncertainty.intrinsic import Intrinsic
from fitter.sample.uncertainty.zero_point import ZeroPoint

__all__ = ["Columns", "Keep", "Rule", "RuleSettings", "SampleSettings"]

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Value = Annotated[bool, Field(strict=True)] | Annotated[int, Field(strict=True)] | Number | str


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True, serialize_by_alias=True)


def _empty_is_default(value: Any) -> Any:
    return {} if value is None else value


def _words_as_keys(value: Any) -> Any:
    # A column by position and a survey with a number for a name are numbers to YAML.
    return {str(k): v for k, v in value.items()} if isinstance(value, dict) else value


class Columns(_Section):
    """Which column of the table is what: ours → theirs, by name or by position (0 is the first)."""

    redshift: ColumnRef = Field(description="Redshift in the cosmological (CMB) frame.")
    redshift_helio: ColumnRef | None = Field(None, description="Heliocentric redshift.")
    distance_modulus: ColumnRef | None = Field(None, description="Distance modulus, mag.")
    magnitude: ColumnRef | None = Field(None, description="Standardised magnitude, mag; instead of distance_modulus.")
    calibrator_modulus: ColumnRef | None = Field(
        None,
        description="Distance modulus of the host known from elsewhere, mag; empty, NaN or not above 0 where the row is no calibrator. "
        "Its error belongs to the uncertainty of the row.",
    )
    group: ColumnRef | None = Field(None, description="Group that a supernova belongs to, e.g. its survey.")
    name: ColumnRef | None = Field(None, description="Name of the supernova; checked for duplicates.")

    @model_validator(mode="after")
    def _one_kind_of_data(self) -> Self:
        if (self.distance_modulus is None) == (self.magnitude is None):
            what = "both" if self.magnitude is not None else "neither; a survey without data is for `mufitter rehearse`"
            raise ValueError(f"map exactly one of `distance_modulus` and `magnitude`, not {what}")
        return self


class RuleSettings(_Section):
    """A cut in its long form."""

    range: tuple[Number | None, Number | None] | None = Field(None, description="[low, high], both ends kept; null leaves an end open.")
    one_of: list[Value] | None = Field(None, alias="in", description="Values to keep.")
    exclude: Rule | None = Field(None, alias="not", description="A range or values to remove.")
    group: Annotated[dict[str, Rule], BeforeValidator(_words_as_keys)] | None = Field(
        None, description="{GROUP: rule}: another rule for each group; groups that are not named follow `others`."
    )
    others: Rule | None = Field(None, description="The rule for the groups that `group` does not name; they are all kept by default.")

    @model_validator(mode="after")
    def _one_form(self) -> Self:
        given = [f.alias or name for name, f in type(self).model_fields.items() if getattr(self, name) is not None]
        if len([g for g in given if g != "others"]) != 1 or ("others" in given and self.group is None):
            raise ValueError("a cut has exactly one of `range`, `in`, `not`, `group` (and `others` beside `group`)")
        return self


Rule = RuleSettings | list[Value | None] | Value
RuleSettings.model_rebuild()


class Keep(BaseModel):
    """The cuts. Any other key is a role of `columns` or a column of the table, with its rule."""

    model_config = ConfigDict(extra="allow", frozen=True)
    __pydantic_extra__: dict[str, Rule]

    one_per: ColumnRef | None = Field(None, description="Keep, of the rows with the same value here, the one with the smallest error.")
    calibrators: Literal["spare", "too", "drop"] = Field(
        "spare", description="Redshift cuts spare calibrator rows; `too` cuts them as well, `drop` removes all calibrators."
    )

    @property
    def rules(self) -> dict[str, Any]:
        """Column or role → rule, in the order of the config."""
        return dict(self.__pydantic_extra__ or {})


class SampleSettings(_Section):
    """What was observed."""

    table: PathText = Field(description="The table; its path is relative to the config.")
    columns: Columns = Field(description="Which column is what.")
    header_tag: str | None = Field(None, min_length=1, description="Word that begins the header row.")
    row_tag: str | None = Field(None, min_length=1, description="Word that begins every data row; other rows are skipped.")
    delimiter: str | None = Field(
        None, min_length=1, description="What separates columns (`whitespace`, `tab` or a character); found out by default."
    )
    comment: str | None = Field(None, min_length=1, description="What begins a comment; #, %, ! and // by default.")
    layout: Literal["rows", "bordered"] = Field(
        "rows",
        description="`bordered`: the table is a FITS image with z in its first row, the moduli in its first column and the inverse "
        "covariance inside; `columns` and `uncertainty` can then be left out.",
    )
    missing: Literal["refuse", "drop"] = Field("refuse", description="What to do with rows that lack a needed number.")
    missing_values: list[Number] = Field(default_factory=list, description="Numbers that stand for a missing value, e.g. -999.")
    duplicates: Literal["refuse", "allow"] = Field("refuse", description="What to do when a name occurs twice with differing values.")
    keep: Annotated[Keep, BeforeValidator(_empty_is_default), BeforeValidator(_words_as_keys)] = Field(
        default_factory=Keep, description="The cuts, as data."
    )
    uncertainty: Annotated[list[AnyTerm], Field(min_length=1)] = Field(description="Uncertainty terms; their covariances add.")
    distance_scale: Literal["relative", "absolute", "calibrated"] = Field(
        "relative", description="Whether the zero point is unknown, anchored elsewhere, or set by calibrators in the table."
    )

    @property
    def data_kind(self) -> str:
        """``"distance_modulus"`` or ``"magnitude"``."""
        return "magnitude" if self.columns.magnitude is not None else "distance_modulus"

    @property
    def intrinsic_prior(self) -> dict | None:
        """Prior of a fitted intrinsic scatter."""
        found = [t.intrinsic for t in self.uncertainty if isinstance(t, Intrinsic) and isinstance(t.intrinsic, dict)]
        return found[0] if found else None

    @property
    def covariance_scale_prior(self) -> dict | float | None:
        """Prior, or held value, of the factor on all errors."""
        return next((t.covariance_scale for t in self.uncertainty if isinstance(t, CovarianceScale)), None)

    @model_validator(mode="before")
    @classmethod
    def _border_is_all(cls, given: Any) -> Any:
        # A bordered matrix says by itself where everything is.
        if isinstance(given, dict) and given.get("layout") == "bordered":
            return {"columns": {"redshift": 0, "distance_modulus": 1}, "uncertainty": [{"precision": given.get("table")}]} | given
        return given

    @model_validator(mode="after")
    def _scale_fits_columns(self) -> Self:
        columns = self.columns
        if self.distance_scale == "calibrated" and columns.calibrator_modulus is None:
            raise ValueError("distance_scale: calibrated needs calibrators: map `calibrator_modulus` to the column of their moduli")
        if self.distance_scale == "calibrated" and columns.magnitude is None:
            raise ValueError("distance_scale: calibrated needs magnitudes: map `magnitude` instead of `distance_modulus`")
        return self

    @model_validator(mode="after")
    def _terms_go_together(self) -> Self:
        kinds = Counter(term.kind for term in self.uncertainty)
        beside = [kind for kind in ("sigma", "covariance") if kinds[kind]]
        if kinds["precision"] and beside:
            raise ValueError(f"a precision stands alone: it is the inverse of the whole covariance; remove it or the {beside[0]} term")
        for kind in ("precision", "covariance_scale", "intrinsic"):
            if kinds[kind] > 1:
                raise ValueError(f"there can be one {kind} term only")
        if not set(kinds) - {"covariance_scale", "intrinsic"} and not any(
            isinstance(t, Intrinsic) and not is_free(t.intrinsic) for t in self.uncertainty
        ):
            raise ValueError(
                "nothing fixed says how far the data scatter: add at least one term such as {sigma: COLUMN} or {covariance: FILE}"
            )
        twice = [label for label, count in Counter(t.label for t in self.uncertainty if t.label).items() if count > 1]
        if twice:
            raise ValueError(f"two uncertainty terms have the label `{twice[0]}`: each needs its own")
        if any(isinstance(t, ZeroPoint) and t.zero_point == "group" for t in self.uncertainty) and self.columns.group is None:
            raise ValueError("zero_point: group needs `group` among the columns, or the name of a column of the table")
        return self

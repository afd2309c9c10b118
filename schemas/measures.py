"""The classical measures of a tally, as checks and streams show them. One look each."""

from __future__ import annotations

from marshmallow import fields

from schemas import words
from schemas.base import Answer, Number, Whole, said

ONE_LOOK = (
    "The p-values of chi_square, g, largest_z and rayleigh hold for one look at a number of "
    "amounts fixed beforehand; looked at again and again they cry wolf. e_value and its p_value "
    "stay valid however often one looks."
)


class SingleLook(Answer):
    """A statistic and its p-value, which holds for one look."""

    statistic = Number(required=True, allow_none=True, metadata=said("The statistic.", minimum=0))
    p_value = Number(
        required=True,
        allow_none=True,
        metadata=said("Its p-value, for one look.", minimum=0, maximum=1),
    )


class LargestZ(Answer):
    """The cell that deviates most."""

    cell = fields.String(required=True, allow_none=True, metadata=said("The cell's digits."))
    z = Number(
        required=True, allow_none=True, metadata=said("Its deviation in standard deviations.")
    )
    p_value = Number(
        required=True,
        allow_none=True,
        metadata=said("Holm-adjusted over the cells, for one look.", minimum=0, maximum=1),
    )


class Band(Answer):
    """A published band of the mean absolute deviation, where the count lets it mean anything."""

    name = fields.String(
        required=True, validate=words.one_of("close", "acceptable", "marginal", "off")
    )
    cut_offs = fields.List(
        Number(),
        required=True,
        metadata=said("Deviations up to which a view is close, acceptable, marginal."),
    )
    source = fields.String(required=True, metadata=said("Where the cut-offs were published."))


class MisfitInterval(Answer):
    """The 95 % interval of a misfit."""

    misfit_low = Number(
        required=True,
        allow_none=True,
        metadata=said("Lower end of its 95 % interval.", minimum=0, maximum=1),
    )
    misfit_high = Number(
        required=True,
        allow_none=True,
        metadata=said("Upper end of its 95 % interval.", minimum=0, maximum=1),
    )


class Measures(MisfitInterval):
    """Every measure of one view against its law."""

    count = Whole(required=True, metadata=said("Amounts that the view sees.", minimum=0))
    misfit = Number(
        required=True,
        allow_none=True,
        metadata=said(
            "Share of the amounts that would have to differ to match the law, noise removed.",
            minimum=0,
            maximum=1,
        ),
    )
    band = fields.Nested(
        Band,
        required=True,
        allow_none=True,
        metadata=said("null where the count is too small, or nothing was published."),
    )
    mad = Number(
        required=True,
        allow_none=True,
        metadata=said("Mean absolute deviation of the shares from the law.", minimum=0),
    )
    mad_expected = Number(
        required=True,
        allow_none=True,
        metadata=said("The mad that noise alone gives on average at this count.", minimum=0),
    )
    chi_square = fields.Nested(SingleLook, required=True, metadata=said("Pearson's chi-square."))
    g = fields.Nested(SingleLook, required=True, metadata=said("The likelihood-ratio statistic."))
    kuiper = Number(
        required=True,
        allow_none=True,
        metadata=said("Kuiper's V*; lead_digit: 1.32 at 95 %, 1.58 at 99 % of honest looks."),
    )
    watson_u2 = Number(
        required=True,
        allow_none=True,
        metadata=said("Watson's U squared; lead_digit: 0.195 at 95 %, 0.292 at 99 %."),
    )
    largest_z = fields.Nested(
        LargestZ, required=True, metadata=said("The cell that deviates most.")
    )


class WatchedMeasures(Measures):
    """Measures of a view that detectors watch, with evidence valid at any look."""

    e_value = Number(
        required=True,
        allow_none=True,
        metadata=said("Evidence against the law: at least x with chance at most 1/x.", minimum=0),
    )
    p_value = Number(
        required=True,
        allow_none=True,
        metadata=said("min(1, 1/e_value); valid however often one looks.", minimum=0, maximum=1),
    )


class Circle(Answer):
    """The fractional parts of log10 amount, and how far the amounts spread."""

    count = Whole(required=True, metadata=said("Amounts above zero.", minimum=0))
    rayleigh = fields.Nested(
        SingleLook, required=True, metadata=said("Rayleigh's test of an even spread, 2nR².")
    )
    spread = Number(
        required=True,
        allow_none=True,
        metadata=said("Standard deviation of log10 amount, in decades.", minimum=0),
    )

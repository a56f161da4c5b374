"""All wording in one place: results carry codes and numbers, here they become sentences."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from change_assess.errors import Notice

CAUTIONS = (
    "Estimates describe areas in aggregate. They say nothing about a single parcel.",
    "A reporting programme's own rules and accredited verification come first.",
)

NORMAL_CAUTION = (
    "Where the truth lies outside: normal intervals are too short for rare change of which few or no omissions were "
    "seen, and the labels are not perfect."
)

DISAGREEMENTS = {
    "quantity_disagreement": "quantity disagreement",
    "allocation_disagreement": "allocation disagreement",
    "exchange": "of it exchange",
    "shift": "shift",
}

DEPTHS = {
    "label": "classes",
    "cover": "cover",
    "from-to": "from-to classes",
    "change-class": "change classes",
    "change": "change and no change",
}

INTERVALS = {
    "normal": "estimate ± z · SE; promises its level in large samples only",
    "t": "estimate ± t · SE with the design's degrees of freedom",
    "exact": "exact limits for one stratum's proportion",
    "simulated": "quantiles over simulated samples (the measure is too near a kink to be linearised)",
    "zero-count": "one-sided bound: nothing was seen, this much could be hidden in one stratum",
    "known": "known from the map, not estimated",
    "worst-case": "none, or all, of what is not labelled is of the class; sampling error included",
}

NOTICES: dict[str, str] = {
    "expansion-total": (
        "Expansion totals: units weighted by N/n stand for {estimated_ha:,.1f} ha of {known_ha:,.1f} ha, so shares do "
        "not add up to one."
    ),
    "change-classes-unused": "Change classes need two dates; with one label column they are not used.",
    "byte-order-mark": "{file} begins with a byte-order mark ({encoding}); it was read past.",
    "carriage-return-lines": "{file} ends lines with carriage returns alone; they were read as line ends.",
    "unsampled-strata-excluded": (
        "Strata without a labelled unit, left out: {strata}, with {area_ha:,.0f} ha, {share:.1%} of the area "
        "({names}). All figures, mapped areas included, are for the rest; the worst-case rows say what could be there."
    ),
    "unsampled-strata-assumed": (
        "Strata without a labelled unit, assumed to be like others ({names} like {from}): {strata}, with "
        "{area_ha:,.0f} ha, {share:.1%} of the area, are assumed, not sampled. The worst-case rows say what that hides."
    ),
    "unlabelled-units": (
        "{units} of {selected} selected units in {strata} strata have no complete reference label. The labelled units "
        "of their stratum stand for them; the worst-case rows show what they could change."
    ),
    "partly-labelled-units": (
        "Labelled at some dates only: {units} units. They count as unlabelled here and can serve tables of a single "
        "date."
    ),
    "units-without-map-label": "{units} units have no label of map '{map}'; they count as wrongly mapped.",
    "single-unit-strata": (
        "No standard error can be given: {names} have one labelled unit. Label more units there, or pool them for the "
        "variance only with --collapse STRATUM=INTO."
    ),
    "single-unit-clusters": (
        "No standard error can be given: the clusters {names} have one labelled unit of several. Label more units "
        "there."
    ),
    "labels-differ-by-case": (
        "The labels {labels} differ by upper and lower case only; they count as different classes."
    ),
    "near-kink": (
        "{measures}: some values lie within 2 SE of a point where they cannot be linearised. Their SE is left empty, "
        "their limits come from simulated samples; there, quantity disagreement is biased upwards, allocation "
        "disagreement and exchange downwards."
    ),
    "no-population-size": (
        "{file} gives areas but no numbers of units, so there is no finite population correction, and units weigh "
        "by area."
    ),
    "weights-by-area": "The strata table gives areas but no numbers of units, so units weigh by area.",
    "label-looks-missing": "The labels {labels} look like missing values but count as classes. Leave such cells empty.",
    "kappa": (
        "Kappa was asked for. It mixes quantity and allocation and depends on prevalence; the literature advises "
        "against it as a measure of map accuracy (Pontius & Millones 2011; Foody 2020)."
    ),
    "crossing-area-differs": (
        "The strata add up to {strata_ha:,.2f} ha, the crossing table to {crossing_ha:,.2f} ha. Estimated areas use "
        "the strata, mapped areas the crossing table."
    ),
    "area-distortion": (
        "The grid distorts areas: a map hectare is {lowest:.4f} to {highest:.4f} true hectares. Reproject to an "
        "equal-area grid if that matters."
    ),
    "nodata-not-declared": (
        "{file} declares no no-data code, but {units:,} pixels hold {code}, which often means no data. They count as a "
        "class."
    ),
    "no-data-at-some-dates": (
        "{units:,} pixels ({area_ha:,.1f} ha) have data at some dates only; they are in no transition."
    ),
    "units-without-labels": "Without a reference label: {none} units; labelled at some dates only: {some_dates}.",
    "interpreters-differ": "Interpreters differ on {units} of {of} units that two or more of them labelled.",
    "labels-tied": "{units} units had no single most frequent label; the first interpreter's was taken ({examples}).",
    "label-rows-repeated": "{rows} rows repeat an interpreter's earlier labels.",
    "changed-tick-contradicts-labels": (
        "{ticked_but_same} labels are ticked as changed with equal classes, {not_ticked_but_different} as unchanged "
        "with different classes."
    ),
}


def notice_text(notice: Notice) -> str:
    """Sentence for a notice.

    Raises
    ------
    KeyError
        For a code that has no wording: every code in the package has one, and a test says so.
    """
    return NOTICES[notice.code].format(**{k: _fact(v) for k, v in notice.facts.items()})


def _fact(value: Any) -> Any:
    if isinstance(value, (list, tuple)):
        return _listed([str(v) for v in value])
    return value


def _listed(words: Sequence[str], most: int = 8) -> str:
    shown = ", ".join(words[:most])
    return shown if len(words) <= most else f"{shown} and {len(words) - most} more"

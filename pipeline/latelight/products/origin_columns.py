"""The columns of the tables of common origins."""

from __future__ import annotations

from latelight.products.column import DEC, RA, integer, real, text

__all__ = ["ORIGIN_ARC_COLUMNS", "ORIGIN_COLUMNS"]

_PLACE = "pos.eq.{};meta.main;meta.modelled"

ORIGIN_COLUMNS = (
    real("ra", ".6f", "deg", _PLACE.format("ra"), f"{RA}, of the error ellipse."),
    real("dec", ".6f", "deg", _PLACE.format("dec"), f"{DEC}, of the error ellipse."),
    real(
        "err_major",
        ".6f",
        "deg",
        "stat.error;phys.angSize.smajAxis;pos.errorEllipse",
        "Semi-major axis of the error ellipse, 1 sigma; 95 % lies within 2.448 times "
        "as much.  None on a ridge, where the distance from the arcs is not known, and "
        "at the place of a listed source.",
    ),
    real(
        "err_minor",
        ".6f",
        "deg",
        "stat.error;phys.angSize.sminAxis;pos.errorEllipse",
        "Semi-minor axis of the error ellipse, 1 sigma, or width of the ridge.",
    ),
    real(
        "err_pa",
        ".2f",
        "deg",
        "pos.posAng;pos.errorEllipse",
        "Position angle of the major axis, or of the ridge at (ra, dec), east of "
        "north, 0-180.",
    ),
    integer(
        "n_arcs",
        "meta.number",
        "Arcs that more likely come from here than from elsewhere.",
    ),
    real(
        "score",
        ".3f",
        "",
        "stat.likelihood;arith.ratio",
        "log10 likelihood ratio of the directions of all arcs with this origin and "
        "without it.",
    ),
    text("source", "meta.id.assoc", "Listed outburst that fits, or empty."),
    text("name", "meta.id;meta.main", "Name of the origin in this table."),
    text(
        "kind",
        "meta.code.class",
        "'peak' with an ellipse; 'ridge' when the arcs are all but parallel; 'listed' "
        "at the place of a listed source that has too few arcs for a peak.",
    ),
    real(
        "chance",
        ".3g",
        "",
        "stat.probability",
        "Probability that arcs without this origin score as high by accident.",
    ),
    real(
        "scatter",
        ".2f",
        "deg",
        "stat.stdev;pos.posAng",
        "Angle from the away direction within which half of its arcs are thought to "
        "move: tilted dust, errors of measurement taken out.",
    ),
    real(
        "away_rms",
        ".2f",
        "deg",
        "stat.rms;pos.posAng",
        "RMS over its arcs of motion minus direction away from it.",
    ),
    real(
        "near",
        ".4f",
        "deg",
        "pos.angDistance;stat.min",
        "Least distance from the middle of its arcs; of a ridge only.",
    ),
    real(
        "far",
        ".4f",
        "deg",
        "pos.angDistance;stat.max",
        "Largest distance from the middle of its arcs; of a ridge only.",
    ),
    real(
        "source_score",
        ".3f",
        "",
        "stat.likelihood;arith.ratio",
        "Scores of its arcs for source, speeds included, summed with the probability "
        "that they belong.",
    ),
    real(
        "source_separation",
        ".6f",
        "deg",
        "pos.angDistance",
        "Angle on the sky from (ra, dec) to source.",
    ),
    real(
        "implied_age",
        ".2f",
        "yr",
        "time.age;meta.modelled",
        "Age of source from place, direction and speed of the arcs, tilts averaged "
        "over: median; only where its distance is known and its age is not.",
    ),
    real(
        "implied_age_low",
        ".2f",
        "yr",
        "time.age;stat.min",
        "Lower end of the 68 % interval of implied_age.",
    ),
    real(
        "implied_age_high",
        ".2f",
        "yr",
        "time.age;stat.max",
        "Upper end of the 68 % interval of implied_age.",
    ),
    text("remark", "meta.note", "What to know before believing it."),
)

ORIGIN_ARC_COLUMNS = (
    text("id", "meta.id;meta.main", "Track or candidate that stands for the arc."),
    text("kind", "meta.code.class", "'track' or 'candidate'."),
    text("output", "meta.id.parent;meta.file", "Output folder of its night."),
    text("field", "meta.id;obs.field", "Field word of the frames."),
    real("mjd", ".6f", "d", "time.epoch", "Epoch of the place, MJD (UTC)."),
    real("ra", ".7f", "deg", "pos.eq.ra;meta.main", f"{RA}."),
    real("dec", ".7f", "deg", "pos.eq.dec;meta.main", f"{DEC}."),
    real(
        "normal_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle, east of north, in which the arc moves.",
    ),
    real(
        "normal_pa_err", ".2f", "deg", "stat.error;pos.posAng", "1 sigma of normal_pa."
    ),
    real("speed", ".4f", "arcsec/yr", "phys.veloc.ang", "Speed along normal_pa."),
    real(
        "speed_err",
        ".4f",
        "arcsec/yr",
        "stat.error;phys.veloc.ang",
        "1 sigma of speed.",
    ),
    real(
        "sense_odds",
        ".2f",
        "",
        "stat.probability;arith.ratio",
        "log10 of the odds that the sense of motion is right.",
    ),
    real(
        "weight",
        ".4f",
        "",
        "stat.weight",
        "Share of an independent arc that it counts as: arcs of one filament share "
        "their tilt.",
    ),
    text("origin", "meta.id.assoc", "Origin it most likely belongs to, or empty."),
    real(
        "membership",
        ".4f",
        "",
        "stat.probability",
        "Probability that it belongs there.",
    ),
    real(
        "away_angle",
        ".2f",
        "deg",
        "pos.posAng;arith.diff",
        "Motion minus the direction away from that origin, -180 to 180.",
    ),
    real("separation", ".5f", "deg", "pos.angDistance", "Angle from that origin."),
    text("same", "meta.id.cross", "Other rows of the tables that are the same arc."),
)

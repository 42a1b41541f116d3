"""What people read after `compare`: the verdict, the table of pairs, the zones out of tolerance."""

from converter.jobs.comparison import CompareRecord, Limits, PairRecord

__all__ = ["PAIR_HEADINGS", "ZONE_HEADINGS", "alone_lines", "move_line", "pair_rows", "verdict", "zone_rows"]

PAIR_HEADINGS = (
    "old",
    "new",
    "layer",
    "deviation",
    "new to old",
    "old to new",
    "in order",
    "mean",
    "from",
    "to",
    "rms",
)
ZONE_HEADINGS = ("zone", "profile", "side", "peak", "x", "y", "from along", "to along")


def _figure(value: float | None, sign: bool = False) -> str:
    """Return a number with four figures; nothing for one that was not measured."""
    if value is None or value != value or abs(value) == float("inf"):
        return ""
    return f"{value:+.4g}" if sign else f"{value:.4g}"


def pair_rows(record: CompareRecord) -> list[tuple[str, ...]]:
    """Return a row of text for every pair, the one that lies farthest apart first."""
    rows: list[tuple[str, ...]] = []
    for pair in sorted(record.pairs, key=lambda pair: -pair.deviation.certified):
        d = pair.deviation
        rows.append(
            (
                pair.old_id,
                pair.new_id,
                pair.layer,
                _figure(d.certified) + (" OUT" if pair.within_tolerance is False else ""),
                _figure(d.new_to_old),
                _figure(d.old_to_new),
                _figure(d.in_order),
                _figure(d.mean_signed, True),
                _figure(d.max_minus, True),
                _figure(d.max_plus, True),
                _figure(d.rms),
            )
        )
    return rows


def zone_rows(record: CompareRecord) -> list[tuple[str, ...]]:
    """Return a row of text for every zone out of tolerance of every pair, the highest peak first."""
    found = [(zone, pair) for pair in record.pairs for zone in pair.zones]
    return [
        (
            str(number),
            pair.new_id if zone.along_profile == "new" else pair.old_id,
            zone.side,
            _figure(zone.peak, zone.side != "off"),
            f"{zone.x:.6g}",
            f"{zone.y:.6g}",
            f"{zone.from_along:.6g}",
            f"{zone.to_along:.6g}",
        )
        for number, (zone, pair) in enumerate(sorted(found, key=lambda item: -abs(item[0].peak)), start=1)
    ]


def alone_lines(record: CompareRecord) -> list[str]:
    """Return a line for every profile that only one drawing has."""
    return [
        f"only in {which}: {item['type']} {item['id']} on layer {item['layer']}, "
        f"{'closed' if item['closed'] else 'open'}, length {item['length']:.6g}, "
        f"about ({item['x']:.6g}, {item['y']:.6g})"
        for which, items in (("OLD", record.only_in_old), ("NEW", record.only_in_new))
        for item in items
    ]


def move_line(record: CompareRecord) -> str:
    """Return how NEW was moved."""
    if record.align == "none":
        return "NEW compared where it lies"
    t = record.transform
    about = f"({t.x:.6g}, {t.y:.6g})"
    return f"NEW turned by {t.degrees:+.6g} degrees about {about}, then moved by ({t.dx:+.6g}, {t.dy:+.6g})"


def verdict(record: CompareRecord, limits: Limits | None) -> str:
    """Return the outcome in one sentence."""
    unit = "" if record.units == "unitless" else f" {record.units}"
    worst = max(record.pairs, key=lambda pair: pair.deviation.certified, default=None)
    alone = len(record.only_in_old) + len(record.only_in_new)
    if limits is None:
        parts = ["no tolerance was stated, so there is no verdict", *_farthest(worst, unit)]
        if alone:
            parts.append(f"{_counted(alone)} without a partner")
        return "; ".join(parts)
    out = [pair.new_id for pair in record.pairs if not pair.within_tolerance]
    if record.within_tolerance:
        return "; ".join([f"WITHIN {limits.stated}: {_counted(len(record.pairs))} compared", *_farthest(worst, unit)])
    reasons = []
    if out:
        zones = sum(len(pair.zones) for pair in record.pairs)
        told = f" in {zones} zone{'' if zones == 1 else 's'}" if zones else ""
        reasons.append(
            f"{len(out)} of {_counted(len(record.pairs))}{told}: {', '.join(out[:6])}{', ...' if out[6:] else ''}"
        )
    if alone:
        reasons.append(f"{_counted(alone)} without a partner")
    return "; ".join([f"OUT OF {limits.stated}: {', and '.join(reasons)}", *_farthest(worst, unit)])


def _farthest(worst: PairRecord | None, unit: str) -> list[str]:
    if worst is None or worst.deviation.certified == float("inf"):
        return []
    return [f"certified deviation at most {worst.deviation.certified:.4g}{unit} ({worst.old_id} to {worst.new_id})"]


def _counted(number: int) -> str:
    return f"{number} profile{'' if number == 1 else 's'}"

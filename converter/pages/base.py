"""What all pages share: one look, one frame, and everything that comes from files escaped.

A page is made of the templates in `assets/`. Styles and scripts are put into it, so that it needs no other file, and a
content security policy in it forbids it to fetch any.
"""

import json
import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import jinja2

__all__ = ["embedded", "figure", "rendered"]


def rendered(template: str, data: dict[str, Any], **context: Any) -> str:
    """Return a page as text.

    Args:
        template: name of a template in `assets/` that extends `frame.html`.
        data: what the scripts of the page read, as `embedded` writes it; they find it in the element `data`.
        context: what the template names; text is escaped.
    """
    environment = _environment()
    page = environment.get_template(template).render(data=embedded(data), figure=figure, **context)
    return "".join(sign if not "\ud800" <= sign <= "\udfff" else "\ufffd" for sign in page)


def embedded(data: Any) -> Any:
    """Return data as JSON that is safe within a script element; numbers that are not finite become null.

    `<`, `>` and `&` and the line separators of Unicode are written as escapes, so that no text can end the element.
    """
    import markupsafe

    text = json.dumps(_finite(data), separators=(",", ":"), allow_nan=False)  # everything beyond ASCII is escaped
    for sign in "<>&":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return markupsafe.Markup(text)  # nothing in it can end the element now


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def figure(value: float | None, signed: bool = False) -> str:
    """Return a number with four figures; a dash for one that is not known."""
    if value is None or not math.isfinite(value):
        return "\u2013"
    text = f"{value:+.4g}" if signed and value else f"{value:.4g}"
    return text.replace("-", "\u2212") if "e" not in text else text


def _environment() -> "jinja2.Environment":
    import jinja2
    import markupsafe

    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("converter.pages", "assets"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )

    def asset(name: str) -> Any:
        assert environment.loader is not None
        return markupsafe.Markup(environment.loader.get_source(environment, name)[0])  # our own file

    environment.globals["asset"] = asset
    return environment

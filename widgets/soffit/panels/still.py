"""The still picture beside a live panel: what is left when there is no kernel, no trust or no browser script."""

from __future__ import annotations

import base64
from html import escape

from soffit.present.draw_mpl import png_bytes
from soffit.present.spec import FigureSpec

__all__ = ["LIVE", "STILL", "still_html"]

LIVE, STILL = "soffit-live", "soffit-still"

# A live panel hides the picture that follows it; a panel that is not live is hidden by its picture. The first
# rule needs the panel's own class, which only a drawn view has. Class names are JupyterLab's; where there is none,
# or styles are taken out, the picture simply shows.
_STYLE = (
    f".jp-OutputArea-child:has(.{LIVE}) + .jp-OutputArea-child:has(.{STILL}),"
    f".jp-OutputArea-child:has(.{LIVE}) + .jp-OutputArea-child .{STILL}{{display:none}}"
    f".jp-OutputArea-child:not(:has(.{LIVE})):has(+ .jp-OutputArea-child .{STILL}){{display:none}}"
)


def still_html(specs: tuple[FigureSpec, ...], finding: str) -> str:
    """HTML of still figures with their text alternatives, and the finding under them."""
    pictures = "".join(
        f'<img src="data:image/png;base64,{base64.b64encode(png_bytes(spec)).decode("ascii")}" '
        f'alt="{escape(spec.alt)}" style="max-width:100%">'
        for spec in specs
    )
    return f'<style>{_STYLE}</style><div class="{STILL}">{pictures}<p>{escape(finding)}</p></div>'

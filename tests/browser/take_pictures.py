"""Take the README's pictures of the panels: ``python tests/browser/take_pictures.py [folder]``.

Every panel is opened on the demo in JupyterLab in a headless Chromium; the ceiling panel in both themes.
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from lab import Lab, Sheet, notebook

FOLDER = Path(__file__).resolve().parents[2] / "example_notebooks" / "pictures"
PANELS = {
    "ceiling": "CeilingPanel",
    "intake": "IntakePanel",
    "regression": "RegressionPanel",
    "joint": "JointPanel",
    "prices-of-risk": "PricesPanel",
    "alphas-under-ceiling": "ShrinkagePanel",
    "factor-sets": "FactorSetsPanel",
    "hedge-walk": "WalkForwardPanel",
    "book": "BookPanel",
    "desk": "Desk",
}


_SETTLED = """() => document.querySelector('.soffit-panel svg.svg-figure')
    && !document.querySelector('.soffit-panel').innerText.includes('Computing')"""


def _shot(sheet: Sheet, path: Path) -> None:
    sheet.page.wait_for_function(_SETTLED, timeout=120_000)
    sheet.rest()
    panel = sheet.find(".soffit-panel").first
    panel.scroll_into_view_if_needed()
    panel.screenshot(path=str(path))
    print(path.name)


def main(folder: Path, wanted: list[str]) -> None:
    """Save one picture a panel."""
    folder.mkdir(parents=True, exist_ok=True)
    with Lab(width=1280, height=2200) as lab:
        for key in wanted or PANELS:
            sheet = lab.open(
                notebook(f"import soffit as sf\nstudy = sf.demo_study()\nsf.{PANELS[key]}(study)")
            )
            sheet.run(timeout=180)
            _shot(sheet, folder / f"{key}-light.png")
            if key in ("ceiling", "desk"):
                sheet.theme("Dark")
                _shot(sheet, folder / f"{key}-dark.png")
                sheet.theme("Light")
            sheet.page.close()


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else FOLDER, sys.argv[2:])

"""Find what ships beside the code: the working configuration and the demo's scenario.

In a checkout both lie at the top; an installed wheel carries them inside the package.
"""

from __future__ import annotations

from pathlib import Path

from models.errors import SiteError

_FLOWS = Path(__file__).resolve().parents[1]


def shipped(part: str) -> Path:
    """Folder that ships with halfsat.

    Parameters
    ----------
    part
        Its place in a checkout, such as ``config`` or ``fixtures/demo``.

    Raises
    ------
    SiteError
        If neither the package nor the checkout round it holds that folder.
    """
    inside, beside = _FLOWS / "shipped" / part, _FLOWS.parent / part
    if inside.is_dir():
        return inside
    # Beside an installed package stand other people's folders; only a checkout has its project file there.
    if beside.is_dir() and (_FLOWS.parent / "pyproject.toml").is_file():
        return beside
    raise SiteError(f"'{part}' does not ship with this installation", remedy="install halfsat again")

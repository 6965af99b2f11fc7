"""Where three.js comes from: the copy that the trimesh wheel carries for its own previews.

The project holds no copy of three.js. Its script (MIT licence, global ``THREE``) with TrackballControls
stands inside the one script element of ``resources/templates/viewer.zip`` of the trimesh package; it is cut
out when a page is written, licence line included, and whatever follows TrackballControls there is left
behind.
"""

from __future__ import annotations

import importlib.util
import zipfile
from pathlib import Path

from anticlast.errors import AnticlastError

ARCHIVE = Path("resources") / "templates" / "viewer.zip"
MEMBER = "viewer.html.template"
LICENCE_START = "/**\n * @license"
LICENCE = "SPDX-License-Identifier: MIT"
CONTROLS = "class TrackballControls extends"
CONTROLS_END = "THREE.TrackballControls=TrackballControls;})();"


class ThreeJsNotFound(AnticlastError):
    """three.js is not where the trimesh wheel used to carry it; the message says what was looked for."""


def _fail(what: str) -> ThreeJsNotFound:
    return ThreeJsNotFound(
        f"three.js was not found in the trimesh package: {what}. A release of trimesh may have moved it; "
        f"trimesh 4.5 to 5.2 carry it in {ARCHIVE.as_posix()}"
    )


def trimesh_folder() -> Path | None:
    """Return the folder of the installed trimesh package without importing it, which would take 0.25 s."""
    spec = importlib.util.find_spec("trimesh")
    places = list(spec.submodule_search_locations or ()) if spec else []
    return Path(places[0]) if places else None


def three_script(folder: Path | None = None) -> str:
    """Return three.js with TrackballControls as one script text, licence line first.

    Parameters
    ----------
    folder : Path, optional
        Folder of the trimesh package; found by itself if not given.

    Raises
    ------
    ThreeJsNotFound
        When trimesh, the archive, the file in it or the script in that is missing or looks different.
    """
    folder = folder if folder is not None else trimesh_folder()
    if folder is None:
        raise _fail("trimesh is not installed")
    archive = folder / ARCHIVE
    try:
        with zipfile.ZipFile(archive) as packed:
            page = packed.read(MEMBER).decode("utf-8")
    except (OSError, zipfile.BadZipFile) as error:
        raise _fail(f"its {ARCHIVE.as_posix()} cannot be read ({type(error).__name__})") from error
    except KeyError as error:
        raise _fail(f"its {ARCHIVE.as_posix()} holds no {MEMBER}") from error
    start, controls, end = page.find(LICENCE_START), page.find(CONTROLS), page.find(CONTROLS_END)
    if not 0 <= start < controls < end:
        raise _fail("its page holds no script with a licence line and TrackballControls")
    script = page[start : end + len(CONTROLS_END)]
    if LICENCE not in script[:300] or "</script" in script.lower():
        raise _fail("its script does not start with the MIT licence line, or cannot stand inside a page")
    return script

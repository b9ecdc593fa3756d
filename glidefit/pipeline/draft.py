"""A draft of the assay sheet, written beside the recordings."""

from __future__ import annotations

from pathlib import Path

from glidefit.errors import InputError, OutputError


def draft(
    folder: Path, *, names: str | None, out: Path | None
) -> tuple[Path, list[dict[str, str]]]:
    """Write the draft; its path and its rows.

    Raises
    ------
    InputError
        For a folder without recordings or a pattern that fits nothing.
    OutputError
        For a file that exists already.
    """
    from glidefit.reading.names import draft_sheet
    from glidefit.writing.recordings import sheet_text

    path = out or folder / "assay.csv"
    rows = draft_sheet(folder, names=names, facts=_video_facts)
    if out is not None and out.absolute().parent != folder.absolute():
        for row in rows:  # paths are relative to the sheet
            row["recording"] = str((folder / row["recording"]).absolute())
    try:
        with path.open("x", encoding="utf-8", newline="") as file:
            file.write(sheet_text(rows))
    except FileExistsError as error:
        raise OutputError(
            f"{path}: it exists already and was not changed. Move it away, or choose another --out."
        ) from error
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror}).") from error
    return path, rows


def _video_facts(path: Path) -> dict[str, str]:
    """What a video says of itself, as cells; what is wrong with it goes into a remark."""
    from glidefit.reading.video import read_facts

    try:
        facts = read_facts(path)
    except InputError as error:
        return {"remark": f"{error.found}. {error.remedy}"}
    known = {
        "pixel_um": facts.pixel_um,
        "frame_s": facts.frame_s,
        "exposure_s": facts.exposure_s,
    }
    cells = {name: f"{value:.8g}" for name, value in known.items() if value is not None}
    return cells | ({"remark": "; ".join(facts.notes)} if facts.notes else {})

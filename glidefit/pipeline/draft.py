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
        For a file that exists already, or is to be of another type than CSV.
    """
    from glidefit.reading.names import draft_sheet
    from glidefit.writing.recordings import sheet_text

    path = out or folder / "assay.csv"
    if path.suffix.lower() != ".csv":
        raise OutputError(
            f"{path}: the sheet is written as CSV. Give --out a name that ends in .csv; a "
            "spreadsheet program opens it and can save it as XLSX."
        )
    rows = draft_sheet(folder, names=names, facts=_facts)
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


def lacking(rows: list[dict[str, str]]) -> list[str]:
    """Columns that some video needs and neither its file nor its name tells."""
    from glidefit.reading.video import VIDEO_SUFFIXES

    videos = [row for row in rows if Path(row["recording"]).suffix.lower() in VIDEO_SUFFIXES]
    needed = ("shape", "pixel_um", "frame_s")
    return [name for name in needed if not all(row[name] for row in videos)]


def _facts(path: Path) -> dict[str, str]:
    from glidefit.reading.video import VIDEO_SUFFIXES

    return _video_facts(path) if path.suffix.lower() in VIDEO_SUFFIXES else _table_facts(path)


def _table_facts(path: Path) -> dict[str, str]:
    """A remark on a table without the columns of a track table."""
    from glidefit.reading.track_columns import require_columns
    from glidefit.settings import ColumnSettings

    try:
        require_columns(path, columns=ColumnSettings(), called=path.name)
    except InputError as error:
        return {"remark": f"{error.found}. {error.remedy}"}
    return {}


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

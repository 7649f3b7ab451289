"""Writes the review pack: one PDF and a picture of each chart page, from the same figures."""

from datetime import datetime
from pathlib import Path

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import PdfPages

from hedgesim.report.facts import RunFacts
from hedgesim.report.pages import all_pages
from hedgesim.report.sheet import Sheet
from hedgesim.report.style import report_style
from hedgesim.report.view import View, view_of
from hedgesim.study.studies import Study

_PICTURE_DPI = 150


def build(view: View, facts: RunFacts, *, created: datetime) -> list[Sheet]:
    """All pages with their footers. Call and save inside `report_style`."""
    sheets = all_pages(view, facts)
    for page, sheet in enumerate(sheets, start=1):
        run = f"{facts.experiment_name} {facts.experiment_hash}"
        sheet.footer(f"{run}  |  {created:%Y-%m-%d}  |  page {page} of {len(sheets)}")
        FigureCanvasAgg(sheet.figure)
    return sheets


def write_report(study: Study, facts: RunFacts, folder: Path, *, created: datetime) -> list[Path]:
    """Write `report.pdf` and `figures/*.png` into `folder`.

    Parameters
    ----------
    study : over `facts.ledger`
    facts : what no study computes
    folder : made if missing
    created : date of the run, the only clock in the files: the same arguments give the same bytes

    Returns
    -------
    The files written, the PDF first
    """
    pictures = folder / "figures"
    pictures.mkdir(parents=True, exist_ok=True)
    written = [folder / "report.pdf"]
    with report_style():
        view = view_of(study, facts.ledger)
        about = {
            "Title": facts.title,
            "Subject": f"{facts.experiment_name}: {view.sentence}",
            "Author": "hedgesim",
            "Creator": "hedgesim",
            "CreationDate": created,
            "ModDate": created,
        }
        with PdfPages(written[0], metadata=about) as pdf:
            for sheet in build(view, facts, created=created):
                pdf.savefig(sheet.figure)
                if sheet.name:
                    path = pictures / f"{sheet.name}.png"
                    sheet.figure.savefig(path, dpi=_PICTURE_DPI, metadata={"Software": "hedgesim"})
                    written.append(path)
    return written

"""Doorbells: each takes an id and calls one service. A repeated or late one does nothing."""

from labsite.celery import app
from spectra.services import analyses


@app.task(name="spectra.run_analysis", ignore_result=True)
def run_analysis(analysis_id: int) -> None:
    analyses.execute(analysis_id=analysis_id)

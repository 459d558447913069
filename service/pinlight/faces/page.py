"""The page: one target, its ranked calibrators and where each one's error comes from."""

from flask import Blueprint, render_template, request

from pinlight.errors import InputError, NotFoundError
from pinlight.faces.models import RankingQuestion
from pinlight.faces.service import answer_ranking, from_query, read_question, service
from pinlight.ranking.budget import TERMS
from pinlight.ranking.gates import REASONS, REMARKS
from pinlight.ranking.result import Ranking
from pinlight.version import __version__

__all__ = ["page"]

_ROWS = 15

page = Blueprint("page", __name__)


@page.get("/")
def first_page() -> tuple[str, int]:
    """The ranking of one target; every state has its address."""
    known = service()
    asked = from_query(request.args)
    setups = [(f"{key}/{mode.name}", array, mode) for key, array in known.arrays.items() for mode in array.mode]
    chosen = asked.get("setup", setups[0][0])
    if chosen not in [name for name, _, _ in setups]:
        raise NotFoundError(f"setup is {chosen!r}; it may be one of {', '.join(name for name, _, _ in setups)}")
    key, _, mode = chosen.partition("/")
    ranking, problem, status = None, None, 200
    if target := asked.get("target"):
        try:
            question = {"target": target, "array": key, "mode": mode, "best": _ROWS}
            ranking = answer_ranking(read_question(RankingQuestion, question))
        except (InputError, NotFoundError) as error:
            problem = str(error)
            status = 404 if isinstance(error, NotFoundError) else 400
    text = render_template(
        "page.html",
        setups=setups,
        chosen=chosen,
        asked=asked.get("target", ""),
        ranking=ranking,
        problem=problem,
        terms=TERMS,
        reasons=REASONS,
        remarks=REMARKS,
        version=__version__,
        bars=_bars(ranking) if ranking else [],
    )
    return text, status


def _bars(ranking: Ranking) -> list[list[tuple[str, float, float]]]:
    """For each calibrator the pieces of its strip: term, start and width, in per cent of the widest.

    A strip is as long as the calibration error; within it each term has the share of its square,
    since it is the squares that add up.
    """
    widest = max((star.calibration_error for star in ranking.calibrators), default=1.0)
    strips = []
    for star in ranking.calibrators:
        start, pieces = 0.0, []
        for name in TERMS:
            term = star.budget[name]
            if term:
                width = 100 * star.calibration_error / widest * (term / star.calibration_error) ** 2
                pieces.append((name, round(start, 3), round(width, 3)))
                start += width
        strips.append(pieces)
    return strips

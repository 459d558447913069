"""Sending a ranking to the table and sky viewers that are running, over SAMP (IVOA, 1.3)."""

from pathlib import Path
from typing import Any

from pinlight.errors import PinlightError
from pinlight.faces.tables import as_votable, votable_bytes
from pinlight.ranking.result import Ranking
from pinlight.version import __version__

__all__ = ["send_ranking"]


def send_ranking(ranking: Ranking, folder: Path) -> list[str]:
    """Broadcast a ranking's table, and point sky viewers at the target.

    The table is written into `folder`, from where the viewers read it.

    Returns
    -------
    names : list of str
        Of the programs that listen to tables.

    Raises
    ------
    PinlightError
        If no hub runs, or nobody listens.
    """
    from pyvo.samp import SAMPIntegratedClient
    from pyvo.samp.errors import SAMPClientError, SAMPHubError, SAMPProxyError

    name = ranking.target.name or "target"
    client = SAMPIntegratedClient(
        name="Pinlight", description="Calibrator stars ranked by what they cost",
        metadata={"pinlight.version": __version__}, callable=False,
    )  # fmt: skip
    try:
        client.connect()
    except (SAMPHubError, SAMPClientError, OSError) as error:
        raise PinlightError("no SAMP hub is running; start a table or sky viewer that has one") from error
    try:
        listening = client.get_subscribed_clients("table.load.votable")
        names = sorted(_name_of(client, one) for one in listening)
        if not names:
            raise PinlightError("a SAMP hub is running, but no program there takes tables")
        file = folder / "calibrators.vot"
        file.write_bytes(votable_bytes(as_votable(ranking.table(), "calibrators")))
        client.notify_all(
            {
                "samp.mtype": "table.load.votable",
                "samp.params": {
                    "url": file.resolve().as_uri(),
                    "table-id": f"pinlight-{ranking.edition}-{name}",
                    "name": f"Calibrators of {name}",
                },
            }
        )
        client.notify_all(
            {
                "samp.mtype": "coord.pointAt.sky",
                "samp.params": {"ra": str(ranking.target.ra_deg), "dec": str(ranking.target.dec_deg)},
            }
        )
    except (SAMPHubError, SAMPClientError, SAMPProxyError, OSError) as error:
        raise PinlightError(f"the SAMP hub did not take the table: {error}") from error
    finally:
        client.disconnect()
    return names


def _name_of(client: Any, one: str) -> str:
    metadata = client.get_metadata(one)
    return str(metadata.get("samp.name", one))

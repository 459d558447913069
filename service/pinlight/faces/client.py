"""A Pinlight server as a library: the same calls over HTTP, with time-outs, retries and typed errors."""

import json
import random
import time
from collections.abc import Iterable, Mapping
from http.client import HTTPException
from typing import Any
from urllib.error import HTTPError, URLError
from urllib.parse import quote, urlencode, urlsplit
from urllib.request import HTTPRedirectHandler, Request, build_opener

from pinlight.errors import (
    CatalogueError,
    InputError,
    NotAllowedError,
    NotFoundError,
    PinlightError,
    ServiceError,
    TokenError,
)
from pinlight.faces.answers import plan_from_json, ranking_from_json
from pinlight.planning.night import NightPlan
from pinlight.ranking.result import CalibratorSet, Ranking
from pinlight.ranking.target import Target
from pinlight.version import __version__

__all__ = ["Client"]

_ERRORS: dict[int, type[PinlightError]] = {
    400: InputError, 401: TokenError, 403: NotAllowedError, 404: NotFoundError, 413: InputError,
    415: InputError, 503: CatalogueError,
}  # fmt: skip
_WORTH_RETRYING = (429, 502, 503, 504)
_LARGEST_ANSWER = 256_000_000


class _NoRedirects(HTTPRedirectHandler):
    """A token is sent to nobody but the server it is meant for."""

    def redirect_request(self, *_: Any) -> None:
        return None


class Client:
    """A Pinlight server, asked with the library's own words.

    Parameters
    ----------
    url : str
        Of the server, such as ``http://127.0.0.1:8765``.
    token : str, optional
        A member's; needed to write, and to read where reading is not open.
    timeout_s : float
        For each try.
    retries : int
        How often a question that may be asked again is, when the server cannot be reached or is busy.

    Raises
    ------
    InputError
        If the URL is none of HTTP.

    Notes
    -----
    Errors are the library's own, by the status that the server answers with: `InputError`,
    `NotFoundError`, `TokenError`, `NotAllowedError`, `CatalogueError`; and `ServiceError` where
    the server cannot be reached in time, is no Pinlight, or fails itself.
    """

    def __init__(
        self, url: str, token: str | None = None, *, timeout_s: float = 30.0, retries: int = 3
    ) -> None:
        parts = urlsplit(url)
        if parts.scheme not in ("http", "https") or not parts.hostname:
            raise InputError(f"url is {url!r}; write it as http://HOST:PORT")
        if not timeout_s > 0:
            raise InputError(f"timeout_s is {timeout_s:g}; it must be positive")
        self.url = url.rstrip("/")
        self.timeout_s, self.retries = timeout_s, retries
        self._token = token
        self._opener = build_opener(_NoRedirects)

    def rank(
        self,
        target: "str | Target | Mapping[str, Any]",
        *,
        stations: Iterable[str] | str | None = None,
        from_: str | None = None,
        with_: Iterable[str] | None = None,
        **options: Any,
    ) -> Ranking:
        """Rank calibrators for a target; options as of `pinlight.rank`, the array by the server's name."""
        question = _question(options, stations=_names(stations), with_=_names(with_), from_=from_)
        return ranking_from_json(self._post("rankings", {"target": _target(target)} | question))

    def best_set(
        self, target: "str | Target | Mapping[str, Any]", size: int = 2, **options: Any
    ) -> CalibratorSet:
        """The set of calibrators of one size that costs a target least."""
        sets = {len(one.star_ids): one for one in self.rank(target, **options).best_sets}
        if size not in sets:
            raise InputError(
                f"size is {size}; it may be one of {', '.join(map(str, sets)) or 'none: no star ranks'}"
            )
        return sets[size]

    def plan_night(
        self,
        targets: "Iterable[str | Target | Mapping[str, Any]]",
        *,
        stations: Iterable[str] | str | None = None,
        from_: str | None = None,
        **options: Any,
    ) -> NightPlan:
        """A night of blocks; each target by name, or with what the plan wants of it as the API takes it."""
        wanted = [{"name": one} if isinstance(one, str) else _target(one) for one in targets]
        question = _question(options, stations=_names(stations), from_=from_)
        return plan_from_json(self._post("plans", {"targets": wanted} | question))

    def find(self, name: str) -> int:
        """The id of the star of that name."""
        return int(self._get("stars", name=name)["stars"][0]["star_id"])

    def star(self, star: int | str) -> dict[str, Any]:
        """Everything known of a star, by id or name."""
        return self._get(f"stars/{star if isinstance(star, int) else self.find(star)}")

    def cone(
        self, ra_deg: float, dec_deg: float, radius_deg: float = 1.0, limit: int = 100
    ) -> list[dict[str, Any]]:
        """Stars around a place, nearest first."""
        found = self._get("stars", ra_deg=ra_deg, dec_deg=dec_deg, radius_deg=radius_deg, limit=limit)
        return list(found["stars"])

    def arrays(self) -> list[dict[str, Any]]:
        """The arrays that the server knows."""
        return list(self._get("arrays")["arrays"])

    def editions(self) -> list[dict[str, Any]]:
        """All editions, newest first."""
        return list(self._get("editions")["editions"])

    def standings(self, star: int | str) -> list[dict[str, Any]]:
        """All judgements of a star, oldest first."""
        star_id = star if isinstance(star, int) else self.find(star)
        return list(self._get(f"stars/{star_id}/standings")["standings"])

    def set_standing(self, star: int | str, standing: str, reason: str, **options: Any) -> dict[str, Any]:
        """Add a judgement of a star; options `band`, `mode` and `evidence`. Takes an editor's token."""
        star_id = star if isinstance(star, int) else self.find(star)
        body = {"standing": standing, "reason": reason} | _question(options)
        return self._call("POST", f"stars/{star_id}/standings", body=body, again=False)

    def health(self) -> dict[str, Any]:
        """Whether the server is ready, its version and its edition."""
        return self._get("health")

    def _get(self, path: str, **parameters: Any) -> dict[str, Any]:
        query = urlencode({key: value for key, value in parameters.items() if value is not None})
        return self._call("GET", f"{quote(path)}{'?' if query else ''}{query}")

    def _post(self, path: str, body: dict[str, Any]) -> dict[str, Any]:
        return self._call("POST", path, body=body)

    def _call(self, method: str, path: str, body: Any = None, *, again: bool = True) -> dict[str, Any]:
        """One question, asked again after a pause where that can help and cannot harm."""
        tries = 1 + (self.retries if again else 0)
        for attempt in range(tries):
            last = attempt == tries - 1
            pause_s = 0.2 * 2**attempt * (1 + random.random() / 4)
            try:
                return self._once(method, path, body)
            except _PassingError as error:
                if last:
                    raise error.reason from error.__cause__
                pause_s = min(max(pause_s, error.wait_s), self.timeout_s)
            time.sleep(pause_s)
        raise AssertionError("unreachable")

    def _once(self, method: str, path: str, body: Any) -> dict[str, Any]:
        headers = {"Accept": "application/json", "User-Agent": f"pinlight/{__version__}"}
        if self._token is not None:
            headers["Authorization"] = f"Bearer {self._token}"
        data = None
        if body is not None:
            try:
                data = json.dumps(body, allow_nan=False).encode()
            except ValueError as error:
                raise InputError(f"the question cannot be written as JSON: {error}") from error
            headers["Content-Type"] = "application/json"
        request = Request(f"{self.url}/api/v1/{path}", data, headers, method=method)
        try:
            with self._opener.open(request, timeout=self.timeout_s) as answer:
                text = answer.read(_LARGEST_ANSWER)
        except HTTPError as error:
            with error:
                raise self._refusal(error) from error
        except (URLError, TimeoutError, ConnectionError, HTTPException, OSError) as error:
            reason = getattr(error, "reason", None) or error
            what = (
                f"gave no answer in {self.timeout_s:g} s"
                if _timed_out(error)
                else f"cannot be reached: {reason}"
            )
            raise _PassingError(ServiceError(f"the server at {self.url} {what}")) from error
        try:
            found = json.loads(text)
        except ValueError as error:
            raise ServiceError(
                f"{self.url} answered with something else than JSON; is it a Pinlight?"
            ) from error
        if not isinstance(found, dict):
            raise ServiceError(f"{self.url} answered with JSON of another kind; is it a Pinlight?")
        return found

    def _refusal(self, error: HTTPError) -> Exception:
        """The library's own error for what the server said."""
        try:
            detail = json.loads(error.read(1_000_000))["detail"]
        except (ValueError, KeyError, TypeError, OSError):
            detail = None
        if error.code in _WORTH_RETRYING:
            kind = _ERRORS.get(error.code, ServiceError) if detail else ServiceError
            wait = error.headers.get("Retry-After", "")
            reason = kind(detail or f"the server at {self.url} answered {error.code} {error.reason}")
            return _PassingError(reason, float(wait) if wait.isdigit() else 0.0)
        if detail is None:
            return ServiceError(
                f"the server at {self.url} answered {error.code} {error.reason}; is it a Pinlight?"
            )
        return _ERRORS.get(error.code, ServiceError)(detail)


class _PassingError(Exception):
    """Something that may be gone at the next try, and the error to raise if it is not."""

    def __init__(self, reason: PinlightError, wait_s: float = 0.0) -> None:
        super().__init__(str(reason))
        self.reason, self.wait_s = reason, wait_s


def _timed_out(error: BaseException) -> bool:
    return isinstance(error, TimeoutError) or isinstance(getattr(error, "reason", None), TimeoutError)


def _names(names: Iterable[str] | str | None) -> list[str] | None:
    if names is None:
        return None
    return [name.strip() for name in names.split(",")] if isinstance(names, str) else list(names)


def _target(target: "str | Target | Mapping[str, Any]") -> Any:
    if isinstance(target, Target):
        known = ("name", "ra_deg", "dec_deg", "magnitudes", "diameter_mas", "diameter_error_mas")
        return {key: getattr(target, key) for key in known}
    return target if isinstance(target, str) else dict(target)


def _question(options: Mapping[str, Any], **more: Any) -> dict[str, Any]:
    """Options as the API takes them: no blanks, and no underscore after words that Python keeps for itself."""
    given = {**options, **more}
    return {key.removesuffix("_"): value for key, value in given.items() if value is not None}

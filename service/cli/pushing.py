"""Sending one product: asked for first, sent if need be, tried again while that can help."""

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final, TypeVar
from urllib.parse import quote

import httpx
import typer

from service.cli.already_there import Standing, is_to_be_sent_again, standing_of
from service.cli.client import answer_of, call
from service.cli.progress import News
from service.cli.push_results import Outcome, Result, refused_by
from service.cli.uploading import Offer
from service.errors import Conflict, NotAllowed, NotFound, RejectedInput, Unavailable
from service.products.product import Product

_Made = TypeVar("_Made")
_SCENES: Final = "/v1/scenes"
_ANSWER_SECONDS: Final = 600.0
_FIRST_PAUSE_SECONDS: Final = 0.5
_LONGEST_PAUSE_SECONDS: Final = 60.0
_POLL_SECONDS: Final = 5
_GOING_ON: Final = ("queued", "running")


@dataclass(frozen=True, slots=True, kw_only=True)
class Sender:
    """Sends products to a service.

    Attributes
    ----------
    client
        Of the service.
    is_replacing
        Whether other content under the same ref, or tile and pass, is superseded.
    patience_seconds
        For how long one thing is tried while the service can't be reached or can't do it.
    """

    client: httpx.Client
    is_replacing: bool
    patience_seconds: float

    def sent(self, name: str, product: Product[Any], offer: Callable[[], Offer]) -> Result:
        """Send a product unless it is there; return what became of it."""

        def ended(error: Any, outcome: Outcome) -> Result:
            return refused_by(error, outcome, name=name, product=product)

        try:
            with News("sending") as news:
                outcome, scene = self._sent(offer(), news)
                return Result(name=name, outcome=outcome, product=product, scene=scene)
        except NotAllowed as error:
            return ended(error, Outcome.NOT_ALLOWED)
        except Unavailable as error:
            return ended(error, Outcome.UNAVAILABLE)
        except (RejectedInput, Conflict, NotFound) as error:
            return ended(error, Outcome.REFUSED)
        except OSError as error:
            detail = f"A file of the product can't be read: {error.strerror}."
            return ended(RejectedInput("unreadable", detail), Outcome.REFUSED)
        except RuntimeError:
            detail = "The service failed at this scene; its log says why."
            return ended(RejectedInput("fault", detail), Outcome.FAULT)

    def _sent(self, offer: Offer, news: News) -> tuple[Outcome, Mapping[str, Any]]:
        def attempt() -> tuple[Outcome, Mapping[str, Any]]:
            there = self._content(str(offer.scene["ref"]))
            if there is not None and self._is_there(there, offer):
                return Outcome.THERE, there
            answer = answer_of(
                self.client,
                "POST",
                _SCENES,
                content=offer.body(news.tell),
                headers=offer.headers,
                params=offer.params,
                timeout=httpx.Timeout(_ANSWER_SECONDS, connect=self.client.timeout.connect),
            )
            is_new = answer.status_code == httpx.codes.ACCEPTED
            return (Outcome.SENT if is_new else Outcome.THERE), answer.json()

        return self._in_the_end(attempt)

    def _is_there(self, there: Mapping[str, Any], offer: Offer) -> bool:
        """Whether nothing is to be sent; other content is refused unless it is to replace."""
        if is_to_be_sent_again(there):
            return False
        standing = standing_of(there, offer.scene, offer.files)
        if standing is Standing.OTHER and not self.is_replacing:
            raise _other_content()
        # What a fetched file holds by now, only the service can tell.
        is_asked_anew = offer.files is None and self.is_replacing
        return standing is Standing.SAME and not is_asked_anew

    def _content(self, ref: str) -> Mapping[str, Any] | None:
        """Return what the service has under a ref, None if there is no such scene."""
        try:
            return call(self.client, "GET", f"{_address(ref)}/content")
        except NotFound:
            return None

    def _in_the_end(self, work: Callable[[], _Made]) -> _Made:
        """Return what work gives, tried again for a while where the service can't do it now."""
        until = time.monotonic() + self.patience_seconds
        pause = _FIRST_PAUSE_SECONDS
        while True:
            try:
                return work()
            except Unavailable as error:
                wait = max(pause, error.retry_after_seconds)
                if time.monotonic() + wait > until:
                    raise
                typer.echo(f"  {error.detail} Trying again in {wait:g} s.", err=True)
                time.sleep(wait)
                pause = min(2 * pause, _LONGEST_PAUSE_SECONDS)

    def settled(self, result: Result, *, until: float) -> Result:
        """Wait for a scene's report until a monotonic time; return the result with it."""
        ref = str((result.scene or {})["ref"])
        try:
            with News("measuring") as news:
                scene = self._in_the_end(lambda: self._settled(ref, news, until))
        except (NotAllowed, NotFound, RejectedInput) as error:
            outcome = Outcome.NOT_ALLOWED if isinstance(error, NotAllowed) else Outcome.REFUSED
            return refused_by(error, outcome, name=result.name, product=result.product)
        except Unavailable as error:
            return refused_by(error, Outcome.UNAVAILABLE, name=result.name, product=result.product)
        if scene["state"] in _GOING_ON:
            detail = f"It is still {scene['state']}, and goes on without this command."
            return replace(result, outcome=Outcome.TIMED_OUT, detail=detail, scene=scene)
        if scene["state"] == "failed":
            failure = scene["failure"] or {}
            return replace(
                result,
                outcome=Outcome.REFUSED,
                detail=str(failure.get("detail", "")),
                faults=failure.get("errors", ()),
                scene=scene,
            )
        return replace(result, scene=scene)

    def _settled(self, ref: str, news: News, until: float) -> Mapping[str, Any]:
        while True:
            left = until - time.monotonic()
            wait = max(0, min(_POLL_SECONDS, int(left)))
            scene = call(
                self.client,
                "GET",
                _address(ref),
                headers={"Prefer": f"wait={wait}"} if wait else {},
            )
            news.tell(scene["progress"])
            if scene["state"] not in _GOING_ON or left <= 0:
                return scene
            if not wait:
                time.sleep(max(0.0, left))


def _other_content() -> Conflict:
    return Conflict(
        "scene-exists",
        "The service has other content under this ref. Say `--replace` if this is a corrected or "
        "reprocessed product; the old figures stay queryable by as_of.",
    )


def _address(ref: str) -> str:
    return f"{_SCENES}/{quote(ref, safe='')}"

"""Agencies' products from a terminal: read as they were delivered, sent once."""

import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated, Any, Final

import typer

from service.cli.client import connect_from_environment
from service.cli.push_results import (
    EXITS,
    STOPPING,
    Outcome,
    Result,
    exit_code,
    refused_by,
    tell,
    tell_found,
    tell_report,
    tell_summary,
)
from service.cli.pushing import Sender
from service.cli.uploading import Offer, offer_of_files, offer_of_item
from service.cli.watching import Watch
from service.errors import RejectedInput
from service.products.items import is_item, items_at, read_item_files
from service.products.kinds import is_product, products_at, read_product
from service.products.places import INCOMPLETE, Span
from service.products.product import Product

_EXIT_INTERRUPTED: Final = 130
_LATE: Final = datetime.max.replace(tzinfo=UTC)
_Any = Product[Span] | Product[str]
_Read = tuple[Path, _Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Kinds:
    """What paths are taken for: how products are found, recognised and read."""

    at: Callable[[Path], list[Path]]
    fits: Callable[[Path], bool]
    read: Callable[[Path], _Any]


_DELIVERED: Final = _Kinds(at=products_at, fits=is_product, read=read_product)
_ITEMS: Final = _Kinds(at=items_at, fits=is_item, read=read_item_files)


@dataclass(slots=True)
class _Run:
    """One run of the command: how it was asked, and what became of each product so far.

    `sender` is None when nothing is to be sent.
    """

    kinds: _Kinds
    sender: Sender | None
    as_json: bool
    is_waiting: bool
    timeout: int
    results: list[Result] = field(default_factory=list)

    def read(self, path: Path, *, incomplete: Outcome) -> _Any | None:
        """Return what a path holds, None once it is told why it can't be sent.

        `incomplete` is the outcome of a product of which something is missing.
        """
        try:
            return self.kinds.read(path)
        except RejectedInput as error:
            outcome = incomplete if error.code == INCOMPLETE else Outcome.REFUSED
            self.told(refused_by(error, outcome, name=_name(path)))
        except OSError as error:
            self.told(_unreadable(path, error))
        return None

    def push(self, products: Iterable[_Read]) -> list[tuple[Path, Result]]:
        """Push products in order of acquisition; return those that were tried."""
        tried: list[tuple[Path, Result]] = []
        for path, product in sorted(products, key=lambda each: _order(each[1])):
            tell_found(_name(path), product)
            result = self._sent(path, product)
            tried.append((path, result))
            if not self.is_waiting:
                self.told(result)
            if result.outcome in STOPPING:
                break
        if self.is_waiting:
            self._wait(result for _, result in tried)
        return tried

    def _sent(self, path: Path, product: _Any) -> Result:
        if self.sender is None:
            return Result(name=_name(path), outcome=Outcome.FOUND, product=product)
        is_replacing = self.sender.is_replacing
        return self.sender.sent(
            _name(path), product, lambda: _offer(path, product, is_replacing=is_replacing)
        )

    def _wait(self, results: Iterable[Result]) -> None:
        until = time.monotonic() + self.timeout
        for result in results:
            last = result
            if self.sender is not None and result.outcome in (Outcome.SENT, Outcome.THERE):
                last = self.sender.settled(result, until=until)
            self.told(last)
            tell_report(last)

    def told(self, result: Result) -> None:
        """Tell what became of a product, and keep the outcome for the end."""
        tell(result, as_json=self.as_json)
        self.results.append(replace(result, product=None, scene=None, faults=()))


def _offer(path: Path, product: _Any, *, is_replacing: bool) -> Offer:
    spans = {part: place for part, place in product.files.items() if isinstance(place, Span)}
    if spans:
        return offer_of_files(product.scene, spans, is_replacing=is_replacing)
    return offer_of_item(product.scene, path, is_replacing=is_replacing)


def _name(path: Path) -> str:
    return path.resolve().name


def _unreadable(path: Path, error: OSError) -> Result:
    detail = f"It can't be read: {error.strerror}."
    return Result(name=_name(path), outcome=Outcome.REFUSED, detail=detail)


def _order(product: Product[Any]) -> tuple[datetime, str, str]:
    """Return what products are pushed by: time of acquisition, then processing."""
    scene = product.scene
    try:
        at = datetime.fromisoformat(scene["acquired_at"])
    except ValueError:
        at = _LATE
    is_aware = at.tzinfo is not None
    baseline = str(scene.get("processing_baseline"))
    return (at if is_aware else _LATE, baseline, str(scene["ref"]))


def push(
    paths: Annotated[
        list[Path] | None,
        typer.Argument(
            exists=True,
            metavar="PATH",
            help="A product, or a folder of products.",
            show_default=False,
        ),
    ] = None,
    *,
    watch_folder: Annotated[
        Path | None,
        typer.Option(
            exists=True,
            file_okay=False,
            help="Push what comes into this folder, once it is complete, until Ctrl-C.",
        ),
    ] = None,
    every: Annotated[
        float, typer.Option(min=0.1, help="Seconds between two looks at the folder.")
    ] = 30.0,
    is_stac: Annotated[
        bool,
        typer.Option(
            "--stac",
            help="The paths are STAC Items: files beside them are sent, others fetched by the "
            "service.",
        ),
    ] = False,
    wait: Annotated[bool, typer.Option(help="Wait for the scenes' reports.")] = False,
    timeout: Annotated[int, typer.Option(min=1, help="How many seconds to wait for them.")] = 3_600,
    is_replacing: Annotated[
        bool,
        typer.Option("--replace", help="Supersede other content of a ref, or tile and pass."),
    ] = False,
    patience: Annotated[
        float,
        typer.Option(min=0.0, help="For how many seconds to try while the service is away."),
    ] = 120.0,
    dry_run: Annotated[bool, typer.Option(help="Say what is found; send nothing.")] = False,
    as_json: Annotated[
        bool, typer.Option("--json", help="One JSON object a product on stdout.")
    ] = False,
) -> None:
    """Send products as agencies deliver them; what is there already is not sent again.

    A Sentinel-2 Level-2A SAFE folder, a Landsat Collection 2 Level-2 bundle (folder or tar),
    a folder with a scene.json, or a folder of such; with --stac STAC Items.
    """
    if not paths and watch_folder is None:
        raise typer.BadParameter("Name a product or a folder of products, or use --watch-folder.")

    def go_on(sender: Sender | None) -> None:
        kinds = _ITEMS if is_stac else _DELIVERED
        run = _Run(kinds=kinds, sender=sender, as_json=as_json, is_waiting=wait, timeout=timeout)
        untried = _push_paths(run, paths or [])
        code = exit_code(run.results)
        if watch_folder is not None and code not in _ENDING:
            code = _watched(run, watch_folder, every)
        tell_summary(run.results, untried=untried)
        if code:
            raise typer.Exit(code)

    if dry_run:
        go_on(None)
        return
    with connect_from_environment() as client:
        go_on(Sender(client=client, is_replacing=is_replacing, patience_seconds=patience))


_ENDING: Final = tuple(EXITS[outcome] for outcome in STOPPING)


def _push_paths(run: _Run, paths: Iterable[Path]) -> int:
    """Push what the paths hold; return how many products were not tried."""
    found: list[_Read] = []
    for path in paths:
        try:
            products = run.kinds.at(path)
        except RejectedInput as error:
            run.told(refused_by(error, Outcome.REFUSED, name=_name(path)))
            continue
        except OSError as error:
            run.told(_unreadable(path, error))
            continue
        for each in products:
            product = run.read(each, incomplete=Outcome.REFUSED)
            if product is not None:
                found.append((each, product))
    return len(found) - len(run.push(found))


def _watched(run: _Run, folder: Path, every: float) -> int:
    """Push what comes into a folder until interrupted; return what to exit with."""
    watch = Watch(folder, fits=run.kinds.fits)
    typer.echo("Watching for products; Ctrl-C ends this.", err=True)
    try:
        while EXITS[Outcome.NOT_ALLOWED] != exit_code(run.results):
            _look(run, watch)
            time.sleep(every)
    except KeyboardInterrupt:
        return _EXIT_INTERRUPTED
    return exit_code(run.results)


def _look(run: _Run, watch: Watch) -> None:
    """Push what is complete; what is not is left for a look at which it has changed."""
    found: list[_Read] = []
    for path in watch.look():
        product = run.read(path, incomplete=Outcome.INCOMPLETE)
        if product is None:
            watch.is_done(path)
        else:
            found.append((path, product))
    for path, result in run.push(found):
        if result.outcome is not Outcome.UNAVAILABLE:
            watch.is_done(path)

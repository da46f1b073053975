"""The service in this process, and what tests ask of it."""

import json
import socket
import threading
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import rasterio
import uvicorn
from affine import Affine
from numpy.typing import NDArray
from pyproj import Transformer

from service.app import create_app
from service.clock import now
from service.jobs.warming import warm_up
from service.settings import Settings
from service.store.keys import Scope, add_key
from service.store.sessions import Sessions

ALL_SCOPES = tuple(scope.value for scope in Scope)
ORIGIN = (500_000.0, 5_500_000.0)
"""Upper left corner of the tests' tile: on the central meridian of UTM zone 33N, 15° E."""


class Service:
    """A running service with a key of all scopes."""

    def __init__(self, client: httpx.Client, settings: Settings, sessions: Sessions) -> None:
        self.client = client
        self.settings = settings
        self.sessions = sessions
        self.secret = self.key(*ALL_SCOPES)

    def key(self, *scopes: str, holdings: Sequence[str] | None = None) -> str:
        """Make a key; return its secret."""
        with self.sessions.writing() as session:
            _, secret = add_key(
                session,
                label="test",
                scopes=scopes,
                holdings=holdings,
                expires_at=None,
                created_at=now(),
            )
        return secret

    def call(
        self, method: str, path: str, *, key: str | None = None, **request: Any
    ) -> httpx.Response:
        """Make a request with a key, by default the one of all scopes."""
        headers = {"Authorization": f"Bearer {key or self.secret}", **request.pop("headers", {})}
        return self.client.request(method, path, headers=headers, **request)

    def get(self, path: str, **request: Any) -> Any:
        """Return what a GET answers; it must succeed."""
        answer = self.call("GET", path, **request)
        assert answer.status_code == 200, answer.text
        return answer.json()

    def put_parcels(self, *features: Mapping[str, Any], **request: Any) -> httpx.Response:
        """Put parcels."""
        body = {"type": "FeatureCollection", "features": list(features)}
        return self.call("PUT", "/v1/parcels", json=body, **request)

    def post_scene(
        self,
        scene: Mapping[str, Any],
        files: Mapping[str, Path],
        *,
        wait: int = 30,
        headers: Mapping[str, str] | None = None,
        key: str | None = None,
    ) -> httpx.Response:
        """Post a scene and, unless told otherwise, wait until it is measured."""
        parts: list[tuple[str, Any]] = [("scene", (None, json.dumps(scene), "application/json"))]
        parts += [
            (part, (path.name, path.read_bytes(), "image/tiff")) for part, path in files.items()
        ]
        prefer = {"Prefer": f"wait={wait}"} if wait else {}
        return self.call(
            "POST", "/v1/scenes", files=parts, headers={**prefer, **(headers or {})}, key=key
        )

    def series(self, ref: str, index: str = "ndvi", **params: Any) -> dict[str, Any]:
        """Return one measure's columns of a parcel's series."""
        answer = self.get(f"/v1/parcels/{ref}/series", params={"index": index, **params})
        columns: dict[str, Any] = answer["indices"][index]
        return columns


class _Server(uvicorn.Server):
    """A server that says when it answers."""

    def __init__(self, config: uvicorn.Config) -> None:
        super().__init__(config)
        self.answers = threading.Event()

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        await super().startup(sockets=sockets)
        self.answers.set()


@contextmanager
def serving(settings: Settings) -> Iterator[Service]:
    """Serve a deployment in this process, on a real loopback socket."""
    # A test that waits for a scene does not wait for the compiler too.
    warm_up()
    app = create_app(settings)
    listener = socket.create_server(("127.0.0.1", 0))
    server = _Server(uvicorn.Config(app, log_config=None, access_log=False))
    thread = threading.Thread(target=server.run, kwargs={"sockets": [listener]})
    thread.start()
    try:
        assert server.answers.wait(timeout=60)
        assert server.started
        address = f"http://127.0.0.1:{listener.getsockname()[1]}"
        with httpx.Client(base_url=address, timeout=180, trust_env=False) as client:
            yield Service(client, settings, app.state.context.sessions)
    finally:
        server.should_exit = True
        thread.join()
        listener.close()


def square(
    ref: str, *, col: float, row: float, size: float = 10, **properties: Any
) -> dict[str, Any]:
    """Return a parcel: a square of so many 10 m cells, its corner at a cell of the tests' tile."""
    x0, y0 = ORIGIN[0] + 10 * col, ORIGIN[1] - 10 * row
    x1, y1 = x0 + 10 * size, y0 - 10 * size
    to_degrees = Transformer.from_crs("EPSG:32633", "EPSG:4326", always_xy=True).transform
    ring = [to_degrees(x, y) for x, y in [(x0, y0), (x0, y1), (x1, y1), (x1, y0), (x0, y0)]]
    return {
        "type": "Feature",
        "properties": {"ref": ref, **properties},
        "geometry": {"type": "Polygon", "coordinates": [[list(position) for position in ring]]},
    }


def write_band(
    path: Path,
    numbers: NDArray[Any],
    *,
    cell_m: float = 10.0,
    origin: tuple[float, float] = ORIGIN,
    crs: str | None = "EPSG:32633",
    nodata: float | None = None,
) -> Path:
    """Write a GeoTIFF of one band (rows, cols) or several (bands, rows, cols)."""
    bands = numbers if numbers.ndim == 3 else numbers[np.newaxis]
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        count=bands.shape[0],
        height=bands.shape[1],
        width=bands.shape[2],
        dtype=bands.dtype,
        crs=crs,
        transform=Affine(cell_m, 0, origin[0], 0, -cell_m, origin[1]),
        nodata=nodata,
        compress="deflate",
    ) as file:
        file.write(bands)
    return path


SCENE = {
    "ref": "s1",
    "sensor": "sentinel-2-l2a",
    "acquired_at": "2024-06-03T10:10:31Z",
    "processing_baseline": "05.10",
    "platform": "sentinel-2b",
    "tile": "t1",
}


def uniform_scene(
    folder: Path, reflectances: Mapping[str, float], *, cells: int = 40, scl: int = 4
) -> dict[str, Path]:
    """Write a Sentinel-2 scene (baseline 05.10) with the same surface everywhere.

    Digital number = reflectance * 10,000 + 1,000; the quality layer has 20 m cells.
    """
    folder.mkdir(parents=True, exist_ok=True)
    files = {
        role: write_band(
            folder / f"{role}.tif",
            np.full((cells, cells), round(value * 10_000 + 1_000), dtype=np.uint16),
        )
        for role, value in reflectances.items()
    }
    classes = np.full((cells // 2, cells // 2), scl, dtype=np.uint8)
    files["quality"] = write_band(folder / "quality.tif", classes, cell_m=20)
    return files

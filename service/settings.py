"""What an operator can set, by environment variables named ``FURROWLIGHT_…``."""

from ipaddress import ip_network
from pathlib import Path
from typing import Annotated
from urllib.parse import urlsplit

from pydantic import Field, field_validator
from pydantic_settings import BaseSettings, NoDecode, SettingsConfigDict

GIBIBYTE = 1024**3


class Settings(BaseSettings):
    """Settings of one deployment; `furrowlight serve` options override the first three.

    Attributes are read from the environment by name (``FURROWLIGHT_DATA``); each default
    suits one machine with SQLite.
    """

    model_config = SettingsConfigDict(env_prefix="FURROWLIGHT_", extra="ignore", frozen=True)

    data: Path = Field(
        default=Path("furrowlight-data"),
        description="Data folder: archive of scene files and, on SQLite, the databases.",
    )
    database_url: str = Field(
        default="",
        description="SQLAlchemy URL of a PostgreSQL database (postgresql+psycopg://…); "
        "empty means SQLite in the data folder.",
    )
    allowed_origins: Annotated[tuple[str, ...], NoDecode] = Field(
        default=(),
        description="Origins that may call the API from a browser, comma-separated; none by "
        "default.",
    )
    disk_reserve_bytes: int = Field(
        default=GIBIBYTE,
        ge=0,
        description="Free space to leave on the data folder's disk; uploads get 503 below it.",
    )
    archive_limit_bytes: int = Field(
        default=0,
        ge=0,
        description="Largest size of the scene archive; uploads get 503 above it. 0: no limit.",
    )
    plan_limit_bytes: int = Field(
        default=4 * GIBIBYTE,
        ge=0,
        description="Largest size of the plans kept between scenes: which cells each parcel has.",
    )
    scene_upload_limit_bytes: int = Field(
        default=2 * GIBIBYTE, gt=0, description="Largest upload of one scene."
    )
    parcel_area_limit_ha: float = Field(
        default=100_000.0, gt=0, description="Largest area of one parcel, in hectares."
    )
    cloud_buffer_cells: int = Field(
        default=0,
        ge=0,
        le=20,
        description="Cells of the quality layer around clouds that count as cloud too. Holds for "
        "scenes measured from then on.",
    )
    season_start_north: str = Field(
        default="10-01",
        pattern=r"^(0[1-9]|1[0-2])-(0[1-9]|1\d|2[0-8])$",
        description="First day of the crop year (MM-DD) for parcels north of the equator.",
    )
    season_start_south: str = Field(
        default="04-01",
        pattern=r"^(0[1-9]|1[0-2])-(0[1-9]|1\d|2[0-8])$",
        description="First day of the crop year (MM-DD) for parcels south of the equator.",
    )
    unseen_days: int = Field(
        default=20,
        ge=1,
        le=366,
        description="Days without a look, though passes came, after which `parcel.unseen` is told.",
    )
    event_prefix: str = Field(
        default="app.furrowlight",
        pattern=r"^[a-z][a-z0-9-]*(\.[a-z0-9-]+)+$",
        description="Reverse domain name before the names of events.",
    )
    public_url: str = Field(
        default="", description="Address under which receivers of events reach the service."
    )
    webhook_networks: Annotated[tuple[str, ...], NoDecode] = Field(
        default=(),
        description="Networks (CIDR, comma-separated) that webhooks may reach beyond public "
        "addresses, also by plain http.",
    )
    asset_folders: Annotated[tuple[Path, ...], NoDecode] = Field(
        default=(),
        description="Folders (absolute, comma-separated) whose files STAC Items may name by "
        "`file:` addresses.",
    )
    asset_hosts: Annotated[tuple[str, ...], NoDecode] = Field(
        default=(),
        description="Hosts (comma-separated, with a port if it is not the usual one) from which "
        "the assets of STAC Items are fetched by https.",
    )
    asset_networks: Annotated[tuple[str, ...], NoDecode] = Field(
        default=(),
        description="Networks (CIDR, comma-separated) in which those hosts, and the object store, "
        "may lie beyond public addresses, also by plain http.",
    )
    asset_certificates: Path | None = Field(
        default=None,
        description="File of further certificate authorities (PEM) that those hosts may have.",
    )
    asset_buckets: Annotated[tuple[str, ...], NoDecode] = Field(
        default=(),
        description="Buckets (comma-separated) of the object store from which the assets of STAC "
        "Items are fetched; needs the extra `object-stores`.",
    )
    asset_store_endpoint: str = Field(
        default="", description="Address of the object store; empty means the environment's."
    )
    asset_seconds: float = Field(
        default=300.0, gt=0, le=3600, description="Longest time to fetch all assets of an Item."
    )
    asset_fetches: int = Field(
        default=2, ge=1, le=16, description="Items whose assets are fetched at a time."
    )
    delivery_wait_scale: float = Field(
        default=1.0, gt=0, le=10, description="Stretches the waits between delivery attempts."
    )
    queue_polling_seconds: float = Field(
        default=0.5, ge=0.02, le=60, description="How often the worker looks for work."
    )
    drain_seconds: int = Field(
        default=10, ge=0, le=600, description="How long an ending worker waits for its work."
    )
    log_level: str = Field(default="info", pattern="^(debug|info|warning|error)$")

    @field_validator(
        "allowed_origins",
        "webhook_networks",
        "asset_folders",
        "asset_hosts",
        "asset_networks",
        "asset_buckets",
        mode="before",
    )
    @classmethod
    def _split(cls, value: object) -> object:
        if isinstance(value, str):
            return tuple(part.strip() for part in value.split(",") if part.strip())
        return value

    @field_validator("webhook_networks", "asset_networks")
    @classmethod
    def _are_networks(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        return tuple(str(ip_network(text)) for text in value)

    @field_validator("asset_folders")
    @classmethod
    def _are_absolute(cls, value: tuple[Path, ...]) -> tuple[Path, ...]:
        if not all(folder.is_absolute() for folder in value):
            raise ValueError("name folders from the root, such as /srv/scenes")
        return value

    @field_validator("asset_hosts")
    @classmethod
    def _are_hosts(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for text in value:
            parts = urlsplit(f"//{text}")
            if not parts.hostname or parts.netloc != text or parts.username is not None:
                raise ValueError("name hosts alone, such as tiles.example or tiles.example:8443")
            _ = parts.port  # refuses what is no port
        return value

    @property
    def season_starts(self) -> tuple[str, str]:
        """When crop years begin, north and south of the equator."""
        return self.season_start_north, self.season_start_south

    @property
    def app_url(self) -> str:
        """URL of the service's own database."""
        return self.database_url or f"sqlite:///{self.data / 'app.sqlite'}"

    @property
    def engine_url(self) -> str:
        """URL of the queue's database: a second SQLite file, or the same PostgreSQL."""
        return self.database_url or f"sqlite:///{self.data / 'engine.sqlite'}"

"""The kinds of problem: what each is called, what its page says, and its status."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """A kind of problem: its title, what its page says, and a status if not its error's."""

    title: str
    page: str
    status: int | None = None


KINDS: Final[Mapping[str, Kind]] = {
    "malformed-json": Kind(
        title="Malformed JSON", status=400, page="The body is not JSON. Nothing was kept."
    ),
    "malformed-body": Kind(
        title="Malformed body",
        status=400,
        page="The body is not what its Content-Type says, or ended early. Nothing was kept.",
    ),
    "digest-mismatch": Kind(
        title="Content digest mismatch",
        status=400,
        page="The body does not have the Content-Digest that was sent with it (RFC 9530): it was "
        "damaged on its way. Send it again.",
    ),
    "invalid-input": Kind(
        title="Invalid input",
        page="The input breaks a rule; `errors` says where and how to mend it. Unless the "
        "request said `Prefer: handling=lenient`, nothing of it was kept.",
    ),
    "invalid-parameter": Kind(
        title="Invalid parameter",
        page="A query parameter is unknown, or its value is not one that it takes. Parameters "
        "that do nothing are refused, so that a typing error does not pass for a filter.",
    ),
    "invalid-geometry": Kind(
        title="Invalid geometry",
        page="An outline is not a valid polygon in WGS 84 longitude and latitude (RFC 7946).",
    ),
    "body-too-large": Kind(
        title="Body too large", status=413, page="The body is over the limit of this address."
    ),
    "unsupported-media-type": Kind(
        title="Unsupported media type",
        status=415,
        page="This address does not take bodies of this Content-Type.",
    ),
    "not-acceptable": Kind(
        title="Not acceptable",
        status=406,
        page="None of the media types in Accept can be written here.",
    ),
    "no-key": Kind(
        title="No key", status=401, page="The request carries no key in its Authorization header."
    ),
    "unknown-key": Kind(
        title="Unknown key", status=401, page="The key is unknown, has expired or was revoked."
    ),
    "scope-missing": Kind(title="Scope missing", page="The key may not do this."),
    "key-limited": Kind(
        title="Key limited to holdings",
        page="The key is limited to holdings, and this concerns others too.",
    ),
    "key-too-wide": Kind(
        title="Key too wide", page="A key can't make one with more rights than its own."
    ),
    "not-found": Kind(title="Not found", page="There is nothing at this address."),
    "method-not-allowed": Kind(
        title="Method not allowed", status=405, page="This address does not take this method."
    ),
    "parcel-not-found": Kind(
        title="Parcel not found",
        page="No parcel has this ref, or none that the key may see. Refs are case-sensitive.",
    ),
    "holding-not-found": Kind(
        title="Holding not found", page="No holding has this ref, or none that the key may see."
    ),
    "scene-not-found": Kind(title="Scene not found", page="No scene has this ref."),
    "key-not-found": Kind(title="Key not found", page="No key has this id."),
    "index-not-found": Kind(title="Index not found", page="No index has this id."),
    "file-missing": Kind(
        title="File missing", page="The archive does not hold a file that it should."
    ),
    "ref-taken": Kind(
        title="Ref taken",
        status=409,
        page="Refs are unique in the deployment, and this one belongs to a parcel that the key "
        "may not see.",
    ),
    "season-overlaps": Kind(
        title="Season overlaps",
        status=409,
        page="Crop seasons of a parcel may follow one another within a year, but not overlap.",
    ),
    "scene-exists": Kind(
        title="Scene exists",
        page="The ref stands for other content. A corrected or reprocessed product is sent with "
        "`replace`: its figures supersede the old ones in one step, and those stay queryable "
        "by `as_of`.",
    ),
    "tile-pass-taken": Kind(
        title="Tile and pass taken",
        page="Another scene of this tile and pass is there. A product that supersedes it is "
        "sent with `replace`.",
    ),
    "content-known": Kind(
        title="Content known", page="The same content is kept under another ref."
    ),
    "not-failed": Kind(title="Not failed", page="Only a failed scene can be tried again."),
    "secret-shown": Kind(
        title="Secret already shown",
        page="A key's secret is shown once, in the first answer, and is stored nowhere. If that "
        "answer was lost, revoke the key and make another under a new Idempotency-Key.",
    ),
    "idempotency-key-reused": Kind(
        title="Idempotency-Key reused",
        page="An Idempotency-Key names one request for 24 hours: the same request gets the "
        "first answer again, another request is refused.",
    ),
    "unknown-sensor": Kind(title="Unknown sensor", page="No sensor profile has this id."),
    "sensor-built-in": Kind(title="Built-in sensor", page="It comes with the service as it is."),
    "unknown-offset": Kind(
        title="Unknown offset",
        page="Without the right offset every index would be wrong, and nothing would show it: "
        "a forgotten offset turns an NDVI of 0.79 into 0.52. Send the processing baseline or "
        "the scaling from the product's metadata.",
    ),
    "wrong-quality-layer": Kind(
        title="Wrong quality layer",
        page="The quality or saturation layer is not the one that the sensor's profile reads.",
    ),
    "no-index": Kind(
        title="No index can be measured",
        page="The scene's bands feed none of the watched indices; `GET /v1/indices` lists the "
        "band roles that each needs.",
    ),
    "item-contradicts": Kind(
        title="Item contradicts itself",
        page="The STAC Item says two things of one band, or one that can't be true of the product "
        "that it is about. Nothing is guessed: a wrong offset turns an NDVI of 0.79 into 0.52, "
        "and nothing would show it. Where a catalogue took the offset out of the numbers, the "
        "Item says so by a property `…:boa_offset_applied`.",
    ),
    "asset-forbidden": Kind(
        title="Asset not allowed",
        page="Assets are read from folders, hosts and buckets that the operator allows "
        "(`FURROWLIGHT_ASSET_FOLDERS`, `FURROWLIGHT_ASSET_HOSTS`, `FURROWLIGHT_ASSET_BUCKETS`), "
        "and from none by default.",
    ),
    "asset-refused": Kind(
        title="Asset can't be read",
        page="There is no file to be had at the address of an asset: none is there, it redirects, "
        "or it is not given to this service.",
    ),
    "assets-too-large": Kind(
        title="Assets too large",
        page="All assets of an Item that a scene needs count as one upload, with its limit "
        "(`FURROWLIGHT_SCENE_UPLOAD_LIMIT_BYTES`).",
    ),
    "asset-unavailable": Kind(
        title="Asset unavailable",
        page="The file of an asset could not be had just now, or not in time. Nothing was kept; "
        "the same request may work later.",
    ),
    "fetching-busy": Kind(
        title="Fetching other assets",
        page="The service fetches the assets of a few Items at a time "
        "(`FURROWLIGHT_ASSET_FETCHES`). Send the Item again.",
    ),
    "not-a-raster": Kind(
        title="Not a raster", page="Files must be GeoTIFF or JPEG 2000, told by their content."
    ),
    "unsupported-raster": Kind(
        title="Unsupported raster", page="The file uses a feature that is not read here."
    ),
    "raster-too-large": Kind(
        title="Raster too large", page="The header claims more than the service is ready to read."
    ),
    "truncated-raster": Kind(
        title="Truncated raster", page="The file ends before the pixels that its header names."
    ),
    "unreadable-pixels": Kind(
        title="Unreadable pixels",
        page="Reading the pixels failed somewhere in the file; nothing was measured from it.",
    ),
    "no-crs": Kind(
        title="No coordinate reference system", page="The file does not say where on Earth it lies."
    ),
    "unsupported-crs": Kind(
        title="Unsupported coordinate reference system",
        page="Scenes must be in a projected coordinate reference system in metres, such as UTM; "
        "files of parcels in a projected or geographic one that needs no further file.",
    ),
    "unsupported-grid": Kind(
        title="Unsupported grid", page="Grids must be aligned to their axes, without rotation."
    ),
    "crs-differs": Kind(
        title="Coordinate reference systems differ",
        page="All bands of a scene share one coordinate reference system.",
    ),
    "no-overlap": Kind(title="No overlap", page="All bands of a scene overlap on the ground."),
    "not-outlines": Kind(
        title="Not a file of outlines",
        page="Parcels are read from GeoPackage, zipped Shapefile and GeoJSON files, told by their "
        "content and not by their name.",
    ),
    "unreadable-outlines": Kind(
        title="Unreadable file of outlines",
        page="The file is damaged, incomplete, or uses what is not read here. Nothing was kept.",
    ),
    "outlines-too-large": Kind(
        title="Too much in a file of outlines",
        page="The file holds, or unpacks to, more than the service is ready to read.",
    ),
    "job-not-found": Kind(title="Job not found", page="No job has this id."),
    "disk-full": Kind(
        title="Disk full",
        page="The service keeps a reserve of free disk space and takes no uploads below it.",
    ),
    "worker-running": Kind(
        title="Already served", page="Another process works on the same data folder."
    ),
    "not-ready": Kind(title="Not ready", page="The service can't work at present."),
    "rule-not-found": Kind(title="Rule not found", page="No rule has this id."),
    "notice-not-found": Kind(
        title="Notice not found", page="No regional notice has this id, or none for this key."
    ),
    "entry-not-found": Kind(
        title="Diary entry not found", page="The parcel's diary has no entry with this id."
    ),
    "alert-not-found": Kind(title="Alert not found", page="No alert has this id."),
    "alert-state": Kind(
        title="Alert state", page="What was asked for does not fit what has become of the alert."
    ),
    "precondition-required": Kind(
        title="Precondition required",
        status=428,
        page="Changes of an alert or a rule carry `If-Match` with its entity tag, so that two "
        "people do not overwrite each other.",
    ),
    "precondition-failed": Kind(
        title="Precondition failed",
        status=412,
        page="Somebody, or judging, has changed the alert or rule since it was looked at.",
    ),
    "no-baseline": Kind(
        title="No baseline",
        page="What is normal for a parcel is worked out when a season of it is judged.",
    ),
    "not-kept": Kind(
        title="Not kept",
        page="Figures are kept as they were known at any time, what was expected of them is not.",
    ),
    "webhook-not-found": Kind(title="Webhook not found", page="No webhook has this id."),
    "delivery-not-found": Kind(title="Delivery not found", page="No delivery has this id."),
    "webhook-address": Kind(
        title="Webhook address",
        page="Events are sent by https to public addresses, and elsewhere only if the operator "
        "allows it (`FURROWLIGHT_WEBHOOK_NETWORKS`).",
    ),
    "webhook-disabled": Kind(
        title="Webhook disabled",
        page="The receiver is disabled, by a person or because it said that it is gone for good; "
        "nothing is sent to it. Set its state to active, then try again.",
    ),
    "still-trying": Kind(
        title="Still trying", page="Attempts to deliver this event are still being made."
    ),
    "internal-error": Kind(
        title="Internal error",
        status=500,
        page="The service has a fault; its log tells more under the request's or scene's id.",
    ),
}

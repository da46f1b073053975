"""What is measured."""

from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.routes import contract_router
from service.errors import NotFound
from service.jobs.measuring import WATCHED
from service.spectral.indices import INDICES, Index

router = contract_router("/indices", "indices and sensors")


class IndexOut(BaseModel):
    """An index: what it is, what it needs, what it tells, and who published it."""

    id: str
    title: str
    domain: str
    formula: str
    bands: list[str]
    constants: dict[str, float]
    range: tuple[float | None, float | None]
    typical: str
    rise: str
    fall: str
    source: str
    note: str
    version: str
    watched: bool
    quality_rule: str | None


class IndicesOut(BaseModel):
    """All indices."""

    indices: list[IndexOut]


def _index_out(index: Index) -> IndexOut:
    return IndexOut(
        id=index.id,
        title=index.title,
        domain=index.domain,
        formula=index.formula,
        bands=[role.value for role in index.roles],
        constants=dict(index.constants),
        range=index.valid_range,
        typical=index.typical,
        rise=index.rise,
        fall=index.fall,
        source=index.source,
        note=index.note,
        version=index.version,
        watched=index in WATCHED,
        quality_rule=index.quality_rule,
    )


@router.get("")
def get_indices(_caller: Reader, _context: Ctx) -> IndicesOut:
    """List the indices."""
    return IndicesOut(indices=[_index_out(index) for index in INDICES.values()])


@router.get("/{index_id}")
def get_index(index_id: str, _caller: Reader, _context: Ctx) -> IndexOut:
    """Answer one index."""
    if index_id not in INDICES:
        raise NotFound("index-not-found", "There is no index with this id.")
    return _index_out(INDICES[index_id])

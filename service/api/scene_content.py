"""What a scene was made of, for senders who ask before they send it again."""

from typing import Any, Final

from pydantic import BaseModel

from service.api.context import Ctx, Ingester
from service.api.routes import contract_router
from service.api.scene_checks import SceneIn
from service.store.scenes import SceneState, get_scene
from service.store.tables import Scene

router = contract_router("/scenes", "scenes")

_MEMBERS: Final = SceneIn.model_fields.keys() - {"ref", "replace"}


class FileOut(BaseModel):
    """A file part, by its content."""

    sha256: str
    size: int


class ContentOut(BaseModel):
    """The content of a scene as it was sent last, and what became of it.

    `digest` is of the files and of `scene`, the part of this name as the service keeps it.
    """

    ref: str
    state: SceneState
    digest: str
    scene: dict[str, Any]
    files: dict[str, FileOut]


@router.get("/{ref}/content")
def get_scene_content(ref: str, caller: Ingester, context: Ctx) -> ContentOut:
    """Answer the digests of a scene's files, so that a sender need not send what is there."""
    caller.must_see_all("a scene")
    with context.sessions.reading() as session:
        return _out(get_scene(session, ref))


def _out(row: Scene) -> ContentOut:
    return ContentOut(
        ref=row.ref,
        state=SceneState(row.state),
        digest=row.digest,
        scene={name: value for name, value in row.details.items() if name in _MEMBERS},
        files={file.part: FileOut(sha256=file.digest, size=file.size) for file in row.files},
    )

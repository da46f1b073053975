"""One worker to a data folder and to a database: two would take each other's work for lost."""

from pathlib import Path

import pytest

from service.app import open_resources
from service.errors import Unavailable
from service.jobs.worker import Worker
from service.settings import Settings


def test_a_database_has_one_worker_whatever_its_folder(settings: Settings, tmp_path: Path) -> None:
    # PostgreSQL is shared by its address; SQLite lies in the folder.
    is_shared = settings.database_url != ""
    first = Worker(open_resources(settings))
    first.claim()
    other = open_resources(settings.model_copy(update={"data": tmp_path / "other"}))
    second = Worker(other)
    if is_shared:
        with pytest.raises(Unavailable, match="database"):
            second.claim()
        first.release()
    second.claim()
    second.release()
    first.release()

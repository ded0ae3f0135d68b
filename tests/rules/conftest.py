"""Lines held in memory, as the engine's own tests have them."""

from tests.engine.conftest import memory_log, multibeam, run, swath

__all__ = ["memory_log", "multibeam", "run", "swath"]

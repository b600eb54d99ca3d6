"""How JAX is set up: float64, and compiled code kept on disk between runs.

Importing this module is enough. Compiled code goes to the user's cache folder, one folder a JAX
version, readable by the user only; `TRACKFIT_CACHE` names another folder, or `off` for none.
"""

import logging
import os
import warnings
from pathlib import Path

import jax
import platformdirs

CACHE_VARIABLE = "TRACKFIT_CACHE"

_log = logging.getLogger(__name__)


def cache_folder() -> Path | None:
    """Where compiled code is kept, or None when the user switched it off."""
    asked = os.environ.get(CACHE_VARIABLE, "")
    if asked.lower() == "off":
        return None
    base = Path(asked) if asked else Path(platformdirs.user_cache_dir("trackfit"))
    return base / "xla" / jax.__version__


def _set_up() -> None:
    jax.config.update("jax_enable_x64", True)
    # a damaged entry only costs a new compilation; JAX would warn about it at every start
    warnings.filterwarnings("ignore", message="Error reading persistent compilation cache entry")
    folder = cache_folder()
    if folder is None:
        return
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
    except OSError as fault:
        _log.info("compiled code is not kept: %s", fault)
        return
    jax.config.update("jax_compilation_cache_dir", str(folder))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.0)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", 0)


_set_up()

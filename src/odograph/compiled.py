"""Functions compiled once and kept on disk, so that no job compiles again what another one has compiled.

`compiled` stands in for numba's `njit(cache=True)`, whose files are trusted as they are. Here

- code is kept with its digest; what is damaged is compiled again (numba would run it, or end with an error
  that does not name the file);
- its file is named after the argument types and the processor. numba numbers the files in the order in which
  they come, and two processes that compile the same function for different arguments at the same moment may
  give both the same number: later processes would run the code of one on the arguments of the other;
- code that cannot be kept, because no folder can be written or the disk is full, is still run;
- code that somebody else may have written is not read. The files are pickles of machine code: whoever can
  write them can have anything run, and a digest that lies with the code can be written as well. So they have
  to belong to this user, to the administrator or to the owner of the module, and not to be writable by all.

Where the code lies is for numba to say: `NUMBA_CACHE_DIR`, else beside the module, else the user's cache.
"""

from __future__ import annotations

import hashlib
import inspect
import logging
import os
import pickle
import stat
from collections.abc import Callable
from pathlib import Path
from typing import Any

from numba import njit
from numba.core.caching import CompileResultCacheImpl, FunctionCache
from numba.core.serialize import dumps

logger = logging.getLogger(__name__)


def compiled(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile a function on its first call with new argument types, or load its code; it releases the GIL."""
    kernel = njit(nogil=True)(function)
    try:
        kernel._cache = _KeptCode(function)  # what njit(cache=True) does, with a cache of numba's own
    except RuntimeError as error:
        logger.warning("%s; it is compiled again in every process (set NUMBA_CACHE_DIR)", error)
    return kernel


class _CheckedCode(CompileResultCacheImpl):
    """Compiled code as bytes with their digest."""

    def reduce(self, result: Any) -> tuple[str, bytes]:
        code = dumps(super().reduce(result))
        return hashlib.sha256(code).hexdigest(), code

    def rebuild(self, target_context: Any, kept: tuple[str, bytes]) -> Any:
        digest, code = kept
        if hashlib.sha256(code).hexdigest() != digest:
            raise ValueError("its digest does not match")
        code = pickle.loads(code)  # noqa: S301 (files of other owners are not read; see the module's text)
        return super().rebuild(target_context, code)


class _KeptCode(FunctionCache):
    """numba's cache of one function, with checked code in files that no two kinds of arguments share."""

    _impl_class = _CheckedCode

    def load_overload(self, arguments: Any, target_context: Any) -> Any:
        foreign = self._foreign()
        if foreign is not None:
            logger.warning("compiled code that others may have written is not used; delete it: %s", foreign)
            return None
        try:
            return super().load_overload(arguments, target_context)
        except Exception as error:  # unpickling what is damaged may raise anything
            logger.warning("compiled code is damaged and made again: %s: %r", self._place, error)
        try:
            self.flush()
        except OSError as error:
            logger.warning("damaged code could not be removed: %s: %s", self._place, error)
        return None

    def save_overload(self, arguments: Any, result: Any) -> None:
        if self._foreign() is not None:
            return  # saving reads the index first
        kind = repr((arguments, result.codegen.magic_tuple()))
        name = f"{self._impl.filename_base}.{hashlib.sha256(kind.encode()).hexdigest()[:12]}"
        self._cache_file._data_name = (name + ".{}.nbc").format
        try:
            super().save_overload(arguments, result)
        except Exception as error:  # whatever it is, the code in memory is whole
            logger.warning("compiled code could not be kept: %s: %r", self._place, error)

    def _foreign(self) -> Path | None:
        """A file of this function's that others own or anybody may write."""
        if not hasattr(os, "getuid"):
            return None
        owners = {os.getuid(), 0, Path(inspect.getfile(self._py_func)).stat().st_uid}
        for file in Path(self.cache_path).glob(f"{self._impl.filename_base}.*"):
            try:
                facts = file.stat()
            except OSError:
                continue
            if facts.st_uid not in owners or facts.st_mode & stat.S_IWOTH:
                return file
        return None

    @property
    def _place(self) -> str:
        return f"{self.cache_path}/{self._impl.filename_base}"

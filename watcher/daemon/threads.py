"""Blocking work beside the event loop, in threads that never keep the process from ending."""

from __future__ import annotations

import asyncio
import contextlib
import contextvars
import threading
from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar

P = ParamSpec("P")
T = TypeVar("T")


async def in_thread(function: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
    """What `function` returns or raises, run in a thread of its own.

    Not the loop's pool: work that hangs would use up its few threads, and its end is waited for when the process ends. A
    daemon's thread costs some tens of microseconds, and an interpreter that ends leaves it behind.
    """
    loop = asyncio.get_running_loop()
    done: asyncio.Future[T] = loop.create_future()
    context = contextvars.copy_context()

    def settle(result: Any, error: BaseException | None) -> None:
        if done.done():
            return
        if error is None:
            done.set_result(result)
        else:
            done.set_exception(error)

    def work() -> None:
        result, raised = None, None
        try:
            result = context.run(function, *args, **kwargs)
        except BaseException as error:  # noqa: BLE001 - handed to whoever waits
            raised = error
        with contextlib.suppress(RuntimeError):  # the loop was closed meanwhile
            loop.call_soon_threadsafe(settle, result, raised)

    threading.Thread(target=work, name=f"watcher {getattr(function, '__name__', 'work')}", daemon=True).start()
    return await done

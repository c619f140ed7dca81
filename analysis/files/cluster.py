"""Work handed to an existing Dask scheduler: the same groups, the same results, in the same order."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import Any, Protocol, TypeVar

from darkedge.analysis.errors import InputError

Shared = TypeVar("Shared")
Group = TypeVar("Group")
Result = TypeVar("Result")
Result_co = TypeVar("Result_co", covariant=True)


class _Future(Protocol[Result_co]):
    def result(self) -> Result_co: ...


CONNECT_S = 20
"""How long a scheduler may take to answer."""


def over_cluster(
    address: str, work: Callable[[Shared, Group], Result], shared: Shared, groups: Sequence[Group]
) -> Iterator[Result]:
    """Carry out `work(shared, group)` for every group on the workers of a scheduler, and yield the results in the order of the groups.

    Parameters
    ----------
    address : str
        Of the scheduler, such as ``tcp://10.0.0.5:8786``. Its workers need darkedge, and see the same files under the same paths.

    Raises
    ------
    InputError
        The extra is not installed, nothing answers at the address, it has no workers, or a worker failed.
    """
    try:
        import distributed
    except ImportError as error:
        raise InputError(
            "the engine for --cluster is not installed", where="--cluster", mend="pip install 'darkedge[cluster]'"
        ) from error
    try:
        make: Any = distributed.Client
        client: Any = make(address, timeout=CONNECT_S, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        raise InputError(
            "no scheduler answers", where="--cluster", found=address, wanted="the address of a running one, tcp://host:port",
            mend="check the address and that the scheduler runs",
        ) from error  # fmt: skip
    with client:
        if not client.scheduler_info()["workers"]:
            raise InputError("the scheduler has no workers", where="--cluster", found=address, mend="start some")
        everywhere = client.scatter(shared, broadcast=True, hash=False)
        futures = [client.submit(work, everywhere, group, pure=False) for group in groups]
        for future in futures:
            yield _result(future, address)


def _result(future: _Future[Result], address: str) -> Result:
    try:
        return future.result()
    except InputError:
        raise
    except Exception as error:
        raise InputError(
            "a worker of the cluster failed", where="--cluster", found=f"{type(error).__name__}: {error}",
            mend=f"see that the workers of {address} have the same darkedge and the same files under the same paths",
        ) from error  # fmt: skip

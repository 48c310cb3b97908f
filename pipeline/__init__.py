"""Leading modes, coefficients and accuracy of measurement campaigns whose shards lie in an object store.

>>> import shardfold
>>> result = shardfold.open_result("s3://results/bridge/latest")  # doctest: +SKIP
>>> result.mode_table, result.coefficients("2031-04-12", "2031-04-13")  # doctest: +SKIP
"""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from shardfold.results import Result, open_result

__all__ = ["Result", "open_result"]


def __getattr__(name: str) -> Any:
    # Workers import the package for every task; the reading API with all its tables is loaded by who asks for it.
    if name in __all__:
        from shardfold import results

        return getattr(results, name)
    raise AttributeError(f"module 'shardfold' has no attribute {name!r}")

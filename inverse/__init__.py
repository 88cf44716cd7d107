"""From behaviour to parts: assemblies of coupled oscillators that do what was asked.

`load_study` reads a study file; `Study` is what it gives, and what a script can build from an
`inverse.assembly.assembly.Assembly`, variables and objectives. Both are loaded when first named, so that importing the
package costs nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from inverse.study.study import Study, load_study

__all__ = ["Study", "load_study"]


def __getattr__(name: str) -> Any:
    """Load a public name from where it lives."""
    if name in __all__:
        import inverse.study.study

        return getattr(inverse.study.study, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")

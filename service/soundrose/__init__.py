"""core: the public face of soundrose as a library: settings, the pipeline, products and errors.

Names are loaded when first asked for: a process of the service imports only what it needs, so that it starts quickly.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from soundrose._version import __version__

if TYPE_CHECKING:
    from soundrose.errors import ConfigError, SoundroseError, StartError, StreamError, UsageError, WireError
    from soundrose.pipeline import Pipeline
    from soundrose.product.messages import HealthProduct, MapProduct, Product
    from soundrose.settings import load_settings, parse_settings
    from soundrose.settings_types import Settings

__all__ = [
    "ConfigError",
    "HealthProduct",
    "MapProduct",
    "Pipeline",
    "Product",
    "Settings",
    "SoundroseError",
    "StartError",
    "StreamError",
    "UsageError",
    "WireError",
    "__version__",
    "load_settings",
    "parse_settings",
]

_HOME = {
    "Pipeline": "pipeline",
    "HealthProduct": "product.messages",
    "MapProduct": "product.messages",
    "Product": "product.messages",
    "load_settings": "settings",
    "parse_settings": "settings",
    "Settings": "settings_types",
}


def __getattr__(name: str) -> Any:
    if name not in __all__:
        raise AttributeError(f"module 'soundrose' has no attribute {name!r}")
    return getattr(import_module(f"soundrose.{_HOME.get(name, 'errors')}"), name)

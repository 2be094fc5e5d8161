"""From initial data to the stationary state: starts, charges, dynamics, ensembles, comparison.  Floor: quench.

Names are loaded on first use; nothing here imports JAX before a family is fitted.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from maxent.quench.comparison import Comparison as Comparison
    from maxent.quench.comparison import Ensemble as Ensemble
    from maxent.quench.comparison import compare as compare
    from maxent.quench.conservation import Conservation as Conservation
    from maxent.quench.conservation import check_conservation as check_conservation
    from maxent.quench.conservation import require_conserved as require_conserved
    from maxent.quench.conservation import state_defect as state_defect
    from maxent.quench.dephasing import Dephased as Dephased
    from maxent.quench.dephasing import dephase as dephase
    from maxent.quench.evolution import Evolution as Evolution
    from maxent.quench.evolution import evolve as evolve
    from maxent.quench.gaussian_comparison import compare_gaussian as compare_gaussian
    from maxent.quench.gaussian_evolution import gaussian_evolve as gaussian_evolve
    from maxent.quench.gaussian_forms import gaussian_family as gaussian_family
    from maxent.quench.gaussian_forms import gaussian_mean as gaussian_mean
    from maxent.quench.gaussian_starts import gaussian_ground as gaussian_ground
    from maxent.quench.gaussian_starts import gaussian_pattern as gaussian_pattern
    from maxent.quench.gaussian_starts import gaussian_state as gaussian_state
    from maxent.quench.gaussian_starts import gaussian_thermal as gaussian_thermal
    from maxent.quench.gaussian_starts import read_covariance as read_covariance
    from maxent.quench.infinite_chains import HardCoreChain as HardCoreChain
    from maxent.quench.infinite_chains import TransverseFieldChain as TransverseFieldChain
    from maxent.quench.sizes import SizeSeries as SizeSeries
    from maxent.quench.sizes import size_series as size_series
    from maxent.quench.spectrum import Spectrum as Spectrum
    from maxent.quench.starts import Start as Start
    from maxent.quench.starts import ground_start as ground_start
    from maxent.quench.starts import read_start as read_start
    from maxent.quench.starts import thermal_start as thermal_start
    from maxent.quench.truncated import truncated_ensembles as truncated_ensembles
    from maxent.quench.windows import gaussian_window as gaussian_window
    from maxent.quench.windows import scan_widths as scan_widths
    from maxent.quench.windows import sharp_window as sharp_window
    from maxent.quench.yardsticks import block_bound as block_bound
    from maxent.quench.yardsticks import plateau_window as plateau_window
    from maxent.quench.yardsticks import revival_time as revival_time

_HOME = {
    "compare_gaussian": "gaussian_comparison",
    "gaussian_evolve": "gaussian_evolution",
    "gaussian_family": "gaussian_forms",
    "gaussian_mean": "gaussian_forms",
    "gaussian_ground": "gaussian_starts",
    "gaussian_pattern": "gaussian_starts",
    "gaussian_state": "gaussian_starts",
    "gaussian_thermal": "gaussian_starts",
    "read_covariance": "gaussian_starts",
    "HardCoreChain": "infinite_chains",
    "TransverseFieldChain": "infinite_chains",
    "truncated_ensembles": "truncated",
    "Comparison": "comparison",
    "Conservation": "conservation",
    "check_conservation": "conservation",
    "require_conserved": "conservation",
    "state_defect": "conservation",
    "Dephased": "dephasing",
    "Ensemble": "comparison",
    "compare": "comparison",
    "dephase": "dephasing",
    "Evolution": "evolution",
    "evolve": "evolution",
    "SizeSeries": "sizes",
    "Spectrum": "spectrum",
    "Start": "starts",
    "ground_start": "starts",
    "read_start": "starts",
    "thermal_start": "starts",
    "gaussian_window": "windows",
    "scan_widths": "windows",
    "sharp_window": "windows",
    "size_series": "sizes",
    "block_bound": "yardsticks",
    "plateau_window": "yardsticks",
    "revival_time": "yardsticks",
}

__all__ = [
    "Comparison", "Conservation", "Dephased", "Ensemble", "Evolution", "HardCoreChain", "SizeSeries", "Spectrum",
    "Start", "TransverseFieldChain", "block_bound", "check_conservation", "compare", "compare_gaussian", "dephase",
    "evolve", "gaussian_evolve", "gaussian_family", "gaussian_ground", "gaussian_mean", "gaussian_pattern",
    "gaussian_state", "gaussian_thermal", "gaussian_window", "ground_start", "plateau_window", "read_covariance",
    "read_start", "require_conserved", "revival_time", "scan_widths", "sharp_window", "size_series", "state_defect",
    "thermal_start", "truncated_ensembles",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'maxent.quench' has no attribute {name!r}")
    value = getattr(import_module(f"maxent.quench.{_HOME[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOME])

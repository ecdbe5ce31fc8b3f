"""What was asked of the study, worded from its configuration."""

from __future__ import annotations

from wrackline.report.rounding import format_aep, format_count, format_percent, format_unit
from wrackline.study.config import StudyConfig


def describe_question(config: StudyConfig, n_gauges: int, n_targets: int) -> tuple[str, ...]:
    """Return the sentences of the section "What was asked"."""
    found = [config.study.purpose] if config.study.purpose else []
    sites = f"{format_count(n_gauges)} gauge{'' if n_gauges == 1 else 's'}"
    if n_targets:
        sites += f" and {format_count(n_targets)} ungauged site{'' if n_targets == 1 else 's'}"
    found.append(f"The study's inputs hold {sites}.")
    at_gauges, at_targets = _name_aeps(config.aeps.gauges), _name_aeps(config.aeps.targets)
    if n_targets and at_gauges != at_targets:
        found.append(
            f"Floods are wanted for annual exceedance probabilities of {at_gauges} at gauges, and of {at_targets} at ungauged sites"
        )
    else:
        found.append(f"Floods are wanted for annual exceedance probabilities of {at_gauges}")
    found[-1] += (
        f", in {format_unit(config.units.flow)}, each with the interval that holds {format_percent(config.confidence)} of the probability."
    )
    return tuple(found)


def _name_aeps(aeps: tuple[float, ...]) -> str:
    names = [format_aep(aep) for aep in aeps]
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"

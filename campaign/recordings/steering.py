"""What steers the reading of one recording: everything but its bytes that its results depend on.

A worker is given this and no more, and results that are kept are found by its digest; so what is not here
cannot change a result unnoticed.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import fields, replace

from campaign.keeping.program import digest_of
from campaign.keeping.value_codec import encode
from campaign.recordings.description import Description
from campaign.recordings.identity import NamingRules
from campaign.recordings.register import Register, plain_path

NOT_STEERING = frozenset(
    {
        "title",
        "text",
        "description",
        "licence",
        "date",
        "first_day",
        "last_day",
        "authors",
        "files",
        "length_reference",
        "node_reference_mm",
        "readout",
        "use",
        "range_strain",
        "range_elongation_mm",
        "limits",
        "margins",
        "geometries",
        "electrode_resistance_ohm",
        "costs",
        "plot_library",
        "earlier",
        "plan",
        "simulated",
        "notices",
    }
)
"""Fields of the description that reading does without: they are blank in what a worker is given."""

_BLANK = Description("")


def steering_rules(rules: NamingRules, files: Collection[str]) -> NamingRules:
    """Return what is needed to read some recordings and nothing that is not.

    Parameters
    ----------
    rules
        Of the whole campaign.
    files
        The recordings, by path.

    Returns
    -------
    NamingRules
        The description without what does not steer, and of ``trials.csv`` the rows of these recordings.
    """
    keys = [(plain_path(file),) for file in files]
    trials = rules.registers.trials
    of_files = Register(
        trials.name, trials.columns, (), {key: trials.refused[key] for key in keys if key in trials.refused}
    )
    return replace(
        rules,
        description=_steering_description(rules.description),
        registers=replace(rules.registers, trials=of_files, notices=()),
        trial_rows={key: rules.trial_rows[key] for key in keys if key in rules.trial_rows},
    )


def _steering_description(description: Description) -> Description:
    names = {field.name for field in fields(description)} & NOT_STEERING
    return replace(description, **{name: getattr(_BLANK, name) for name in names})


def campaign_steering(rules: NamingRules) -> str:
    """Return the digest of what steers the reading of every recording of a campaign."""
    registers = (rules.registers.modules.present, rules.registers.sensors.present)
    parts = (_steering_description(rules.description), rules.generations_are_named, registers)
    return digest_of([encode(parts)])


def file_steering(file: str, rules: NamingRules, campaign: str) -> str:
    """Return the digest of what is known to steer the reading of one recording before it is opened.

    Parameters
    ----------
    file
        Path from the campaign folder.
    rules
        Of the campaign, or from :func:`steering_rules`.
    campaign
        From :func:`campaign_steering`.
    """
    key = (plain_path(file),)
    said = (rules.trial_rows.get(key), rules.registers.trials.refused.get(key))
    return digest_of([campaign, file, encode(said)])


def module_steering(module: str, rules: NamingRules) -> str:
    """Return the digest of what the registers say of a module and its sensors.

    Which module a recording is of may be known only when it has been read: so this is compared afterwards.
    """
    modules, sensors = rules.registers.modules, rules.registers.sensors
    row = rules.module_rows.get((module,))
    said = (
        row,
        modules.refused.get((module,)),
        tuple(other.get("module") for other in modules.rows) if row is None else (),
        [(key, own.values) for key, own in rules.sensor_rows.items() if key[0] == module],
        [(key, reason) for key, reason in sensors.refused.items() if key[0] == module],
    )
    return digest_of([encode(said)])

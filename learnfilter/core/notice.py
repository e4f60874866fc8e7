"""What a position estimate may not be used for, said in the same words everywhere.

The command line's help, every report page, the README and every bundle's manifest print this text.
Reasons: ISO 12100 and ISO 3691-4 leave the risk assessment to whoever builds or integrates the machine;
ISO 13849-1 gives a performance level to a safety-related part of a control system, which this is not.
"""

SAFETY_NOTICE = (
    "The position estimate is not a safety function and carries no performance level. "
    "Detecting people and stopping is the job of separately assessed safety equipment. "
    "Whoever builds, integrates or operates the robot makes the risk assessment."
)

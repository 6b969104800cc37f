"""The fault matrix: causes named first, case by case."""

from __future__ import annotations

from campaign.fault_cases import CASES, first_cause

SNRS_DB = (15.0, 25.0)
NAMED_FIRST, CLEAN = 0.95, 0.99


def run(seeds: int) -> int:
    """Print the matrix; the exit code."""
    print(f"{'fault':<26} {'SNR dB':>6} {'named first':>11} {'named':>6}  named first else")
    first, faults, quiet, clean = 0, 0, 0, 0
    for case in CASES:
        for snr_db in SNRS_DB:
            found = [first_cause(case, snr_db, seed) for seed in range(seeds)]
            if not case.expected:
                none = sum(not names for names in found)
                quiet, clean = quiet + none, clean + seeds
                others = {names[0] for names in found if names}
                print(f"{case.name:<26} {snr_db:6g} {none:>8} silent of {seeds}  {others or ''}")
                continue
            right = sum(bool(names) and case.expected in names[0] for names in found)
            named = sum(any(case.expected in name for name in names) for names in found)
            others = {n[0] if n else "nothing" for n in found if not n or case.expected not in n[0]}
            first, faults = first + right, faults + seeds
            told = "; ".join(sorted(others))[:60]
            print(f"{case.name:<26} {snr_db:6g} {right:>5} of {seeds:<3} {named:>6}  {told}")
    print(f"clean captures without a cause: {quiet} of {clean}")
    print(f"named first: {first} of {faults}, {100 * first / faults:.1f} %")
    return 0 if first >= NAMED_FIRST * faults and quiet >= CLEAN * clean else 1

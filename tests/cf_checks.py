"""What a general CF checker says of a file."""

import pytest

# what the checker does not know yet: since CF-1.9 (appendix F) a geostationary grid has scan angles in rad
_OLDER_RULE = "grid mapping geostationary requires exactly one variable with standard_name projection_"


def complaints(path):
    """What a general CF checker says of a file: (errors and warnings, without the outdated rule)."""
    pytest.importorskip("compliance_checker", reason="needs compliance-checker, which the extra 'test' brings")
    from compliance_checker.runner import CheckSuite

    suite = CheckSuite()
    suite.load_all_available_checkers()
    dataset = suite.load_dataset(str(path))
    scores, _ = suite.run_all(dataset, ["cf:1.11"])["cf:1.11"]
    messages = []

    def collect(results):
        for result in results:
            passed = result.value[0] == result.value[1] if isinstance(result.value, tuple) else bool(result.value)
            messages.extend([] if passed else result.msgs or [])
            collect(result.children or [])

    collect(scores)
    return [m for m in messages if not m.startswith(_OLDER_RULE)]

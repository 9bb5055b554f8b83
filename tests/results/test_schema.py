import re

import pytest

from manybody.results.schema import GROUPS, RESERVED_NAMES, VARIABLES, units_text


@pytest.mark.parametrize("variable", VARIABLES.values(), ids=lambda v: v.name)
def test_entry_is_complete_and_consistent(variable):
    assert re.fullmatch(r"[a-z][a-z0-9_]*", variable.name)
    assert variable.name not in RESERVED_NAMES
    assert variable.per in ("point", "cluster", "rule", "lattice")
    assert variable.units in ("energy", "energy2", "1", "s", "bytes", "")
    assert (variable.dtype == "flag") == bool(variable.flags)
    assert (variable.units == "") == (variable.dtype in ("flag", "text"))
    assert all(" " not in word for word in (*variable.flags, variable.unknown))
    assert set(variable.dims) <= set(RESERVED_NAMES)
    assert not variable.dims or variable.group in GROUPS
    attrs = variable.attrs("meV")
    assert attrs["long_name"] and (variable.dtype != "flag" or len(attrs["flag_values"]) == len(variable.flags) + 1)


def test_the_gap_is_not_called_an_excitation_gap():
    assert VARIABLES["gap"].long_name == "quantum minus classical ground energy"


def test_flags_are_read_as_word_bool_or_index():
    certified = VARIABLES["classical_certified"]
    assert [certified.flag_value(v) for v in ("no", "yes", "unknown", False, True, 1)] == [0, 1, -1, 0, 1, 1]
    for wrong in ("maybe", 7, 0.5):
        with pytest.raises(ValueError, match="classical_certified"):
            certified.flag_value(wrong)


def test_units_follow_the_users_energy_unit():
    assert [units_text(k, "meV") for k in ("energy", "energy2", "1", "s")] == ["meV", "meV2", "1", "s"]
    assert units_text("energy2", "1") == "1"

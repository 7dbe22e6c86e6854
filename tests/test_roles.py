"""Who is who, by label and unit; the user's word wins; a doubt about the venous pressure is an error that helps."""

from __future__ import annotations

import numpy as np
import pytest

from caval.errors import InputError
from caval.recording import Recording
from caval.roles import ROLES, assign_roles


def record(*channels: tuple[str, str]) -> Recording:
    return Recording.from_arrays({label: (np.zeros(10), 100.0, unit) for label, unit in channels}, name="r")


@pytest.mark.parametrize("label", ["CVP", "cvp", "RAP", "P2 CVP", "CVP (mmHg)", "Central venous pressure", "CVP1", "ra", "  CVP  "])
def test_venous_labels(label: str) -> None:
    assert assign_roles(record((label, "mmHg")))["cvp"] == label


@pytest.mark.parametrize(
    ("label", "unit", "role"),
    [
        ("II", "mV", "ecg"), ("ECG II", "mV", "ecg"), ("MLII", "mV", "ecg"), ("V5", "mV", "ecg"), ("EKG", "uV", "ecg"),
        ("ABP", "mmHg", "abp"), ("ART", "mmHg", "abp"), ("Arterial", "mmHg", "abp"), ("PAP", "mmHg", "pap"), ("Paw", "mbar", "paw"),
        ("CO2", "%", "co2"), ("RESP", "", "resp"), ("PLETH", "", "pleth"),
    ],
)
def test_other_labels(label: str, unit: str, role: str) -> None:
    assert assign_roles(record(("CVP", "mmHg"), (label, unit))) == {"cvp": "CVP", role: label}


def test_lead_ii_is_taken_before_other_leads() -> None:
    assert assign_roles(record(("V5", "mV"), ("aVR", "mV"), ("II", "mV"), ("CVP", "mmHg")))["ecg"] == "II"


def test_a_pressure_is_no_ecg_whatever_it_is_called() -> None:
    assert "ecg" not in assign_roles(record(("CVP", "mmHg"), ("V", "mmHg")))


def test_a_word_inside_a_word_is_no_match() -> None:
    roles = assign_roles(record(("CVP", "mmHg"), ("TRAIL", "mV"), ("PARTS", "mmHg")))
    assert roles == {"cvp": "CVP"}


def test_the_users_word_wins() -> None:
    here = record(("CVP", "mmHg"), ("P2", "mmHg"), ("II", "mV"), ("X", "mV"))
    roles = assign_roles(here, {"cvp": "p2", "ecg": "X"})
    assert roles["cvp"] == "P2"
    assert roles["ecg"] == "X"


def test_one_channel_plays_one_role() -> None:
    roles = assign_roles(record(("RA", "mmHg"), ("ART", "mmHg"), ("II", "mV"), ("I", "mV")))
    assert len(set(roles.values())) == len(roles)


def test_two_candidates_are_listed() -> None:
    with pytest.raises(InputError, match=r"'CVP1', 'CVP2'.*--role cvp=LABEL"):
        assign_roles(record(("CVP1", "mmHg"), ("CVP2", "mmHg")))
    assert assign_roles(record(("CVP1", "mmHg"), ("CVP2", "mmHg")), {"cvp": "CVP2"})["cvp"] == "CVP2"


def test_no_candidate_lists_what_there_is() -> None:
    with pytest.raises(InputError) as caught:
        assign_roles(record(("II", "mV"), ("P2", "")))
    said = str(caught.value)
    assert "'II' (mV, 100 Hz)" in said
    assert "'P2' (no unit, 100 Hz)" in said
    assert "--role cvp=LABEL" in said


def test_unknown_role_or_label_is_refused_with_what_is_allowed() -> None:
    with pytest.raises(InputError, match=", ".join(ROLES)):
        assign_roles(record(("CVP", "mmHg")), {"heart": "CVP"})
    with pytest.raises(InputError, match="there are: CVP"):
        assign_roles(record(("CVP", "mmHg")), {"cvp": "P9"})

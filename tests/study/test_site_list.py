"""Sites of a file and cutoffs from text: what is read, what is refused and why."""

from pathlib import Path

import numpy as np
import pytest

from study.document import Study, parse_study
from study.errors import StudyError
from study.site_list import cutoffs_from_file, list_sites, read_cutoffs

TEXT = '[data]\npath = "a.csv"\n[columns]\nsite = "town"\nscore = "need"\n'


def study_in(folder: Path) -> Study:
    (folder / "a.csv").write_text("town,need\nT10,3\nT2,1\nT2,\nT2,5\n,4\nT10,2.5\n")
    return parse_study(TEXT, folder / "study.toml")


def test_sites_are_listed_naturally_with_their_scores(tmp_path: Path) -> None:
    found = list_sites(study_in(tmp_path))
    assert [site.name for site in found.sites] == ["T2", "T10"]
    assert found.without_site == 1
    assert (found.low, found.high) == (1.0, 5.0)
    first = found.sites[0]
    assert np.array_equal(first.scores, [1.0, 5.0]) and first.missing == 1
    assert found.sites[1].sides(2.5) == (0, 1, 1)
    assert list(first.strip(4, 1.0, 5.0)) == [1, 0, 0, 1]


@pytest.mark.parametrize(
    "text",
    [
        "Elm\t12\nOak Hill\t-3.5",
        "site,cutoff\nelm,12\nOAK HILL,-3.5\n",
        "Elm = 12\r\n\r\nOak Hill = −3,5",
        'Elm; 12\n"Oak Hill": -3.5',
    ],
)
def test_lines_of_many_kinds_are_read(text: str) -> None:
    assert read_cutoffs(text, ("Elm", "Oak Hill")) == {"Elm": 12.0, "Oak Hill": -3.5}


def test_bad_lines_say_which_and_what_to_do(tmp_path: Path) -> None:
    with pytest.raises(StudyError) as problem:
        read_cutoffs("Elm,12\nOak,7\n", ("Elm",))
    assert str(problem.value) == (
        'Line 2 names "Oak", which is no site of the data.\nCorrect the name, or leave the line out.'
    )
    with pytest.raises(StudyError) as problem:
        read_cutoffs("Elm,12\nnothing here\n", ("Elm",))
    assert problem.value.what == 'Line 2 is "nothing here", not a site and its cutoff.'
    with pytest.raises(StudyError) as problem:
        read_cutoffs("ELM,12\n", ("Elm", "elm"))  # which of the two is meant?
    assert "no site" in problem.value.what
    with pytest.raises(StudyError) as problem:
        cutoffs_from_file(tmp_path / "none.csv", ("Elm",))
    assert problem.value.do == "Name a UTF-8 text or CSV file."

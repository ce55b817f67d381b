"""What results files must not tell: where on this machine things lie."""

import pytest

from mrics.study.files import without_folders


@pytest.mark.parametrize(
    ("value", "kept"),
    [
        ("/home/someone/scan.nii.gz", ".../scan.nii.gz"),
        ("~/scans/one.nii", ".../one.nii"),
        ("C:\\Users\\Someone\\one.nii", "...\\one.nii"),
        ("\\\\server\\share\\one.nii", "...\\one.nii"),
        ("scans/one.nii.gz", "scans/one.nii.gz"),
        ("../one.nii.gz", "../one.nii.gz"),
        ("T: 1/2 of the lines", "T: 1/2 of the lines"),
        ("", ""),
        (3.5, 3.5),
        (None, None),
    ],
)
def test_absolute_paths_are_cut_to_their_last_part(value: object, kept: object) -> None:
    assert without_folders(value) == kept
    assert without_folders({"key": [value]}) == {"key": [kept]}


def test_paths_quoted_in_a_text_are_cut_and_the_rest_is_left() -> None:
    text = 'title = "It\'s 1/2"\nscans = ["/home/someone/a.nii", \'/x/y/b.nii\', "rel/c.nii"]\n'
    cut = 'title = "It\'s 1/2"\nscans = [".../a.nii", \'.../b.nii\', "rel/c.nii"]\n'
    assert without_folders(text) == cut

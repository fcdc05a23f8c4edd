"""Which files a batch takes, and where its outputs go."""

from pathlib import Path, PurePath

import pytest
from hypothesis import given
from hypothesis import strategies as st

from grader.errors import PresetError
from grader.sources import Source, check_target_folder, find_sources, name_targets


@pytest.fixture
def tree(tmp_path: Path) -> Path:
    for name in ["a.dng", "b.JPG", "notes.txt", ".hidden.jpg", "sub/a.dng", "sub/deep/c.png", ".cache/x.jpg"]:
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"")
    return tmp_path


def names(sources: list[Source]) -> list[str]:
    return [source.relative.as_posix() for source in sources]


def test_a_folder_gives_its_pictures(tree: Path) -> None:
    sources, missing = find_sources([tree])
    assert names(sources) == ["a.dng", "b.JPG"]
    assert missing == []


def test_recurse_goes_down_but_not_into_hidden_folders(tree: Path) -> None:
    assert names(find_sources([tree], recurse=True)[0]) == ["a.dng", "b.JPG", "sub/a.dng", "sub/deep/c.png"]


def test_the_output_folder_is_never_taken_in(tree: Path) -> None:
    sources, _ = find_sources([tree], recurse=True, leave_out=[tree / "sub"])
    assert names(sources) == ["a.dng", "b.JPG"]


def test_globs_and_repeats(tree: Path) -> None:
    sources, _ = find_sources([f"{tree}/*.dng", tree / "a.dng", f"{tree}/./a.dng"])
    assert names(sources) == ["a.dng"]


def test_a_file_named_by_itself_is_always_taken(tree: Path) -> None:
    assert names(find_sources([tree / "notes.txt"])[0]) == ["notes.txt"]


def test_paths_that_name_nothing_are_told(tree: Path) -> None:
    (tree / "empty").mkdir()
    sources, missing = find_sources([tree / "none.tif", tree / "empty", tree / "a.dng"])
    assert names(sources) == ["a.dng"]
    assert [error.path for error in missing] == [str(tree / "none.tif"), str(tree / "empty")]


def test_two_folders_keep_their_trees_apart(tree: Path) -> None:
    sources, _ = find_sources([tree / "a.dng", tree / "sub" / "a.dng"])
    assert [t.as_posix() for t in name_targets(sources, [".tif", ".tif"])] == ["a.tif", "sub/a.tif"]


def test_the_folder_of_the_originals_is_no_target(tree: Path) -> None:
    for place in (tree, tree / "a.dng", f"{tree}/*.dng"):
        with pytest.raises(PresetError, match="originals"):
            check_target_folder([place], tree)
    check_target_folder([tree], tree / "graded")


def test_a_linked_target_folder_is_seen_through(tree: Path) -> None:
    link = tree.parent / "link"
    link.symlink_to(tree)
    with pytest.raises(PresetError):
        check_target_folder([tree], link)


NAME = st.text(st.characters(codec="utf-8", exclude_characters="/\0"), min_size=1, max_size=6).filter(
    lambda name: name.strip(". ") and PurePath(name).name == name
)


@given(
    st.lists(st.tuples(NAME, st.sampled_from([".jpg", ".JPG", ".dng", ".tif", ""])), max_size=8), st.randoms()
)
def test_no_two_targets_agree_and_the_order_does_not_matter(
    files: list[tuple[str, str]], random: object
) -> None:
    sources = [
        Source(f"x/{i}", PurePath(stem + suffix)) for i, (stem, suffix) in enumerate(dict.fromkeys(files))
    ]
    sources = list({s.relative: s for s in sources}.values())
    targets = dict(
        zip([s.path for s in sources], name_targets(sources, [".jpg"] * len(sources)), strict=True)
    )
    assert len({t.as_posix().casefold() for t in targets.values()}) == len(sources)
    shuffled = sources[:]
    random.shuffle(shuffled)  # type: ignore[attr-defined]
    again = dict(
        zip([s.path for s in shuffled], name_targets(shuffled, [".jpg"] * len(sources)), strict=True)
    )
    assert again == targets

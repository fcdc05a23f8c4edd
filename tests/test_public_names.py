"""The library's face: what a script may rely on."""

import grader

PUBLIC = [
    "Cast", "Correction", "DamagedFile", "Fixed", "Frame", "GraderError", "Header", "MissingFile", "Output",
    "PresetError", "Reading", "Recipe", "TooFewUsablePixels", "UnsupportedFile", "WorkerFailed", "WriteFailed",
    "__version__", "apply", "check", "correct", "load_preset", "measure", "measure_files", "neutralise", "plan",
    "read", "write",
]  # fmt: skip


def test_the_public_names_are_these() -> None:
    assert sorted(grader.__all__) == sorted(PUBLIC)


def test_every_public_name_is_there_and_described() -> None:
    for name in grader.__all__:
        value = getattr(grader, name)
        assert isinstance(value, str) or value.__doc__, name

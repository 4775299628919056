"""The shell completes verbs, options and spellings."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest


def complete(**environment: str) -> str:
    done = subprocess.run(
        [
            sys.executable,
            "-c",
            "import sys; sys.argv[0] = 'realize'; from realize.__main__ import main; sys.exit(main())",
        ],
        capture_output=True,
        text=True,
        timeout=60,
        env={**os.environ, **environment},
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ("realize con", "convert"),
        ("realize convert --ari", "--arithmetic"),
        ("realize convert --to pole", "pole-residue"),
    ],
)
def test_words_are_completed(words: str, found: str) -> None:
    count = str(len(words.split()) - 1)
    text = complete(_REALIZE_COMPLETE="bash_complete", COMP_WORDS=words, COMP_CWORD=count)
    assert found in text


def test_the_shell_gets_its_script() -> None:
    assert "_REALIZE_COMPLETE=bash_complete" in complete(_REALIZE_COMPLETE="zsh_source").replace("zsh_", "bash_")

import pytest

pytest.register_assert_rewrite("tests.cli.outputs")

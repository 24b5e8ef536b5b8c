"""What tests of calls that are refused share."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from latticedip.errors import InputError


def refusal(call: Callable[[], object]) -> str:
    """The message of the InputError that a call raises."""
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value)

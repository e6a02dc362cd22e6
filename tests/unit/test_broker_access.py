"""Files with secrets for brokers: each is taken only where nobody else can read or change it."""

from __future__ import annotations

from pathlib import Path

import pytest
from strandline.broker_access import BrokerAccess
from strandline.errors import StrandlineError


@pytest.mark.parametrize("key", ["password_file", "token_file", "creds_file"])
def test_a_secret_that_others_can_read_is_not_taken(key: str, tmp_path: Path) -> None:
    file = tmp_path / "secret"
    file.write_text("hush\n")
    access = BrokerAccess(user="gauge", **{key: str(file)})
    for mode in (0o600, 0o640):
        file.chmod(mode)
        assert "hush" not in repr(access.secrets())
    for mode in (0o644, 0o660):
        file.chmod(mode)
        with pytest.raises(StrandlineError, match=f"secret: has mode {mode:o}, so others can read or change it"):
            access.secrets()
    file.unlink()
    with pytest.raises(StrandlineError, match="secret: cannot be read"):
        access.secrets()

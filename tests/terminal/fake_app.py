"""The app on the invented desk, as a program for a real terminal."""

import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "tui"))

from tui.terminal import prepare_environment

prepare_environment(os.environ)

from fake_desk import FakeDesk  # noqa: E402

from tui.app import FadelineApp  # noqa: E402

if __name__ == "__main__":
    app = FadelineApp(FakeDesk())
    app.run()
    if app.delta_trouble:
        print(f"DELTA={app.delta_trouble}")
    sys.exit(app.return_code or 0)

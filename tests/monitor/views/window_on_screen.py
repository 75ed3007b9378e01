"""Opens the window on the display that is there, writes what the display shows and what was chosen: run by the tests."""

import json
import sys
from pathlib import Path

from PySide6.QtWidgets import QApplication

from monitor.views import window as windows
from tests.monitor.views.live_states import make_states
from tests.monitor.views.test_window import RecordingWatch


def main(folder, painter):
    watch = RecordingWatch(make_states()["busy"])
    told = {}
    looks = 0

    def until():
        nonlocal looks
        looks += 1
        if looks == 12:
            application = QApplication.instance()
            (window,) = [w for w in application.topLevelWidgets() if isinstance(w, windows.LiveWindow)]
            shot = application.primaryScreen().grabWindow(window.winId())
            shot.save(str(folder / f"{painter}.png"))
            corner = window.face.geometry()
            told["face"] = [corner.x(), corner.y()]
            told["eyes"] = [[e.x, e.y, e.width, e.height] for e in (r.eye for r in window.face.page.boxes.page.rails)]
            told["platform"] = application.platformName()
        return looks > 12

    told["status"] = windows.run_window(
        watch, painter=painter, title="lidwatch", choices=folder / "choices.ini", until=until
    )
    told["auto"] = windows.choose_painter("auto")
    told["calls"] = watch.told
    (folder / f"{painter}.json").write_text(json.dumps(told))


if __name__ == "__main__":
    main(Path(sys.argv[1]), sys.argv[2])

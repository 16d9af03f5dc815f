"""Pictures of every page, drawn by the program itself: `python -m bench.pictures docs/pictures`.

The scene runs through the real decoder and engine, as fast as it can; the screen is Textual's own
SVG export.
"""

import asyncio
import re
import sys
from pathlib import Path

from crestwatch.compose.sources import setup_for
from crestwatch.compose.watching import plan_for
from shift.live import Live
from shift.snapshot import Snapshot
from tui.app import CrestwatchApp
from tui.settings import Settings

# file, scene, seconds in, keys pressed, size
PICTURES = (
    ("now", "hall", 13.6, "1", (120, 40)),
    ("now-small", "hall", 13.6, "1", (80, 24)),
    ("wave", "hall", 13.6, "2 right", (120, 40)),
    ("now-workshop", "workshop", 11.0, "1", (80, 24)),
    ("wave-workshop", "workshop", 11.0, "2 right", (80, 24)),
    ("now-large", "hall", 70.0, "1", (200, 60)),
    ("wave-large", "hall", 70.0, "2 right", (200, 60)),
    ("help", "hall", 2.0, "question_mark", (80, 24)),
)


def snapshot_of(scene: str, seconds: float) -> Snapshot:
    """What the screen would show `seconds` into a scene."""
    from acquisition.autodecode import AutoDecoder
    from acquisition.status import LinkState, ReaderStatus
    from crestwatch.compose.sources import logger_spec
    from sim.device import frames

    decoder = AutoDecoder()

    class Feed:
        """Hands decoded frames out in slices, with no clock at all."""

        status = ReaderStatus(state=LinkState.LIVE, link=f"sim:{scene}")

        def __init__(self) -> None:
            self._frames = frames(logger_spec(scene))

        def take(self, timeout: float) -> list:
            blocks = []
            for due, data in self._frames:
                blocks += decoder.feed(data, due)
                if len(blocks) >= 12 or due >= seconds:
                    break
            state = LinkState.LIVE
            self.status = ReaderStatus(
                state, f"sim:{scene}", decoder.info, decoder.tally, None, len(data)
            )
            self.done = due >= seconds
            return blocks

    feed = Feed()
    feed.done = False
    live = Live(feed, plan_for(f"sim:{scene}", setup_for(None, None, None)), gather=0.0)
    last = live.snapshot
    for _ in live.batches(lambda: feed.done):
        if feed.done:
            break
        last = live.snapshot
    return last


async def draw(folder: Path) -> None:
    """Write every picture."""
    for name, scene, seconds, keys, size in PICTURES:
        snapshot = snapshot_of(scene, seconds)
        app = CrestwatchApp(lambda s=snapshot: s, settings=Settings())
        async with app.run_test(size=size) as pilot:
            await pilot.press(*keys.split())
            await pilot.pause(0.3)
            drawn = app.export_screenshot(title="crestwatch")
            # The viewer's own monospace font does; a picture fetches nothing from anywhere.
            drawn = re.sub(r"@font-face\s*\{.*?\}", "", drawn, flags=re.DOTALL)
            drawn = re.sub(r"<!--.*?-->", "", drawn, flags=re.DOTALL)
            (folder / f"{name}.svg").write_text(drawn, encoding="utf-8")
        sys.stdout.write(f"{folder / name}.svg\n")


if __name__ == "__main__":
    target = Path(sys.argv[1] if len(sys.argv) > 1 else "docs/pictures")
    target.mkdir(parents=True, exist_ok=True)
    asyncio.run(draw(target))

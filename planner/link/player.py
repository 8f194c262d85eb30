"""The thread that plays a host's shots on a real clock, one after the other."""

import threading

from planner.link.adapter import Adapter
from planner.link.host import Host, play

LOOK_AGAIN_S = 0.25  # longest sleep: a stepped clock, or an adapter that became ready, is noticed within this


class Player(threading.Thread):
    """Plays what is due until `stop`; the shot under way is finished first, as nothing can call it back."""

    def __init__(self, host: Host, adapter: Adapter) -> None:
        super().__init__(name="player", daemon=True)
        self._host = host
        self._adapter = adapter
        self._stopping = False

    def run(self) -> None:
        while not self._stopping:
            shot = self._host.take_due()
            while shot is not None:
                outcome = play(self._adapter, shot)
                shot = self._host.finish(shot.key, outcome, more=not self._stopping)
            with self._host.changed:
                pause_s = self._host.seconds_to_event()
                if not self._stopping and (pause_s is None or pause_s > 0):
                    self._host.changed.wait(LOOK_AGAIN_S if pause_s is None else min(pause_s, LOOK_AGAIN_S))

    def stop(self, within_s: float) -> bool:
        """Take no further shot and wait for the one under way, at most `within_s`; whether it has ended."""
        with self._host.changed:
            self._stopping = True
            self._host.changed.notify_all()
        self.join(within_s)
        return not self.is_alive()

"""Messages to people: start, fault, stop, end. Optional, and never worth a run.

Where to is in the environment variable KNEEMAP_NOTIFY (apprise URLs, separated by white space), because such URLs hold
secrets; neither the plan nor the record ever sees them. Needs the extra `kneemap[notify]`. Whatever fails is said once in
the event log and then forgotten; a message is sent from a thread of its own, so a slow server holds up no point.
"""

import os
import threading
from collections.abc import Callable
from pathlib import Path

VARIABLE = "KNEEMAP_NOTIFY"
_LAST_WORD = 5.0  # s that the end of a run waits for its messages


class Notifier:
    """Sends short messages where KNEEMAP_NOTIFY says.

    Args:
        complain: called, at most once, with a text when messages cannot be sent.
    """

    def __init__(self, complain: Callable[[str], None]) -> None:
        self._urls = os.environ.get(VARIABLE, "").split()
        self._complain = complain
        self._failed = ""
        self._threads: list[threading.Thread] = []

    def tell(self, title: str, body: str, picture: Path | None = None) -> None:
        """Send a message and return at once; does nothing where no address is set."""
        if not self._urls:
            return
        thread = threading.Thread(target=self._send, args=(title, body, picture), daemon=True)
        self._threads = [one for one in self._threads if one.is_alive()] + [thread]
        thread.start()

    def close(self) -> None:
        """Give the last messages a moment, then say whether any failed."""
        for thread in self._threads:
            thread.join(timeout=_LAST_WORD)
        if self._failed:
            self._complain(self._failed)

    def _send(self, title: str, body: str, picture: Path | None) -> None:
        # Exception, not a narrower class: apprise loads plug-ins of many hands, and none of them may harm the run.
        try:
            import apprise

            sender = apprise.Apprise()
            accepted = [sender.add(url) for url in self._urls]
            attach = str(picture) if picture is not None and picture.exists() else None
            if not sender.notify(title=title, body=body, attach=attach) or not all(accepted):
                self._failed = f"a message could not be sent; check {VARIABLE}"
        except ImportError:
            self._failed = f"{VARIABLE} is set, but messages need the extra: pip install 'kneemap[notify]'"
        except Exception as error:
            # The class only: the text of an exception may hold the URL and with it a secret.
            self._failed = f"a message could not be sent ({type(error).__name__}); check {VARIABLE}"

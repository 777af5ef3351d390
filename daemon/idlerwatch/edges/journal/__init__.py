"""The one durable log: what came in, what was found, what happened, each with a sequence number.

A folder with files named ``<kind>-<first sequence number>-<week>.sqlite`` (SQLite, WAL), a new one each ISO week and
kind: *cycles* and *windows* as compressed blocks (`idlerwatch.core.blocks`), committed together every `commit_s`;
*events* one row each, committed and synced at once, before anything is sent. Where the files are kept for less than
a week, as in the runtime folder, a new one begins each hour. The order is that of the sequence numbers, never of time:
the clock of a small board may be wrong for its first minutes. Old files are unlinked whole, and only while the clock
is known to be right. Beside them lie the outlets' cursors (``cursor.<outlet>``).

`Journal` writes, from one thread; `JournalReader` reads, one for each thread; `Cursor` remembers how far an outlet is.
"""

from idlerwatch.edges.journal.cursor import Cursor
from idlerwatch.edges.journal.files import Keep
from idlerwatch.edges.journal.reader import JournalReader
from idlerwatch.edges.journal.writer import Journal

__all__ = ["Cursor", "Journal", "JournalReader", "Keep"]

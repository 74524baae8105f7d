"""The largest n and m of a locking order n:m that may be stated; light to import."""

from __future__ import annotations

# The region of order n:m narrows fast with n + m, and one turn missed in a hundred reads as
# another order.
LARGEST_STATED_ORDER = 99

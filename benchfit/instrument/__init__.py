"""Instruments over VISA: sessions that yield Captures, and the dialects in which instruments are spoken to.

```python
with Session("TCPIP::127.0.0.1::5025::SOCKET", ["CH1"]) as session:
    for acquisition in session.acquisitions(every=60.0):
        ...                                  # acquisition.capture, or acquisition.error
```
"""

from benchfit.instrument.dialect import SCPI_1999, Dialect
from benchfit.instrument.session import Acquisition, Session, iso
from benchfit.instrument.trial import Step, trial
from benchfit.instrument.wire import list_resources

__all__ = ["SCPI_1999", "Acquisition", "Dialect", "Session", "Step", "iso", "list_resources", "trial"]

"""monitord watches AM transmissions, day and night.

The way of the data, each folder one stage, in the order in which a sample travels::

    acquire    a sound card, a ZMQ socket, a recording or the built-in station  -> Block
    condition  tune, filter and decimate every channel in one pass              -> Baseband
    detect     recover the carrier, detect the modulation                       -> Detected
    measure    carrier, modulation: per hop a Moment, per interval a Reading    -> Moment, Reading
    notice     rules that find what has begun and what has ended                -> Event
    publish    metrics page, health, replay lines: the way out

`blocks.py` holds the types that travel, `stage.py` what a stage must be able to do,
`chain.py` runs the stages in order, `service.py` builds, runs and stops the whole.
"""

from importlib.metadata import PackageNotFoundError, version

try:
    __version__ = version("monitord")
except PackageNotFoundError:  # run from a source tree that was never installed
    __version__ = "0+unknown"

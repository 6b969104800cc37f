"""SigMF in: recordings, collections, archives -> blocks of samples with their place in time."""

from spatiq.recording.opening import open_recording, recordings_in
from spatiq.recording.placement import Segment
from spatiq.recording.recording import Block, Recording
from spatiq.recording.times import Instant

__all__ = ["Block", "Instant", "Recording", "Segment", "open_recording", "recordings_in"]

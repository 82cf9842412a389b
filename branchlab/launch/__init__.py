"""What is sent, and through which window of the medium. Importing the package registers every kind for JSON."""

from branchlab.launch.band import Band
from branchlab.launch.packet import Packet
from branchlab.launch.setup import Setup
from branchlab.launch.sources import AngularSpread, Beam, FieldSource, PlaneWave, PointSource, Source

__all__ = ["AngularSpread", "Band", "Beam", "FieldSource", "Packet", "PlaneWave", "PointSource", "Setup", "Source"]

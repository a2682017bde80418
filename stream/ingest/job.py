"""What the batches of one call share: store, configuration, network, names of vehicles."""

from functools import cached_property
from typing import Any

from stream.config import Settings
from stream.detect.run import Detector
from stream.ingest.progress import Progress, Tell
from stream.store import Store
from stream.store.ledger import check_config
from stream.store.rows import RowMaker
from stream.store.vehicles import VehicleNames, vehicle_names


class Job:
    """The shared part; detector and row maker are loaded only when there is something to detect.

    Attributes
    ----------
    store, settings : as given
    network : row of the network table
    namer : makes stored names of vehicles
    reference_id : version of the cruise speeds in use
    n_batches : batches named in the call

    Raises
    ------
    StoreError
        The store has no network, was filled with another configuration, or its key is missing.
    """

    def __init__(self, store: Store, settings: Settings, progress: Tell | None, n_batches: int) -> None:
        check_config(store, settings)
        self.store = store
        self.settings = settings
        self.network: dict[str, Any] = self._network()
        self.namer: VehicleNames = vehicle_names(store.path, settings, store.meta().get("key_id"))
        self.reference_id = int(store.meta()["reference_id"])
        self._progress = progress
        self.n_batches = n_batches

    def _network(self) -> dict[str, Any]:
        held = self.store.rows("network/find_network")
        if not held:
            self.store.streets()  # raises what a store without network is told
        return held[0]

    @cached_property
    def detector(self) -> Detector:
        """Load the streets, once and only when there is something to detect."""
        return Detector(self.store.streets(), self.settings, threads=self.settings.run.threads)

    @cached_property
    def maker(self) -> RowMaker:
        """Read the network tables, once."""
        return RowMaker(self.store, self.settings, self.reference_id)

    def tell(self, at: Progress) -> None:
        """Hand progress on."""
        if self._progress is not None:
            self._progress(at)

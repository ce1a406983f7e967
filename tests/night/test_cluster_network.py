"""Nothing of the size of the ensemble crosses the network: what goes over it, by the byte."""

import pickle
from collections import Counter

import numpy as np
import pytest

from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.engine.sharing import install
from ensemble_horizon.runs import Catalogue, close_files


class Line:
    """Does tasks here, but sends them and their results over a line that counts."""

    window = 4

    def __init__(self, common, sent):
        self._common, self.sent = pickle.dumps(common, protocol=5), sent
        sent["common"] += len(self._common)

    def submit(self, function, task):
        payload = pickle.dumps((function, task), protocol=5)
        self.sent["tasks"] += len(payload)
        self.sent["largest task"] = max(self.sent["largest task"], len(payload))
        return payload

    def result(self, payload):
        function, task = pickle.loads(payload)
        before = install(pickle.loads(self._common))
        found = pickle.dumps(function(task), protocol=5)
        install(before)
        self.sent["results"] += len(found)
        return pickle.loads(found)

    def drop(self, payload):
        pass

    def close(self):
        pass


@pytest.fixture
def sent(monkeypatch):
    """Bytes sent, and bytes of values read in tasks."""
    found = Counter()
    monkeypatch.setattr(Engine, "_call_hands", lambda engine: Line(engine._common, found))
    plain = Catalogue.read

    def counted(*arguments, **options):
        values = plain(*arguments, **options)
        found["read"] += values.nbytes
        return values

    monkeypatch.setattr(Catalogue, "read", counted)
    return found


def sizes(sent):
    """What went over the line: the common object, tasks, results; and what was read."""
    found = np.array([sent[name] for name in ("common", "tasks", "results", "read")])
    sent.clear()
    return found


def test_estimate_with_maps_sends_no_ensemble(night, sent, growing):
    """For each point of the grid, less is sent than the values of two of the 24 members there."""
    members, found = 24, []
    for rows in (60, 120):
        grid = {"latitudes": np.linspace(65, 40, rows), "longitudes": np.linspace(-10, 25, 120)}
        night.write(growing(members=members, shape=(rows, 120)), **grid)
        night.settings(products='maps = "each"\nfigures = false')
        assert night.estimate("--quiet").exit_code == 0
        close_files()
        found.append(sizes(sent))
    more = found[1] - found[0]
    values = 12 * 8  # twelve leads of 64 bits
    assert more[3] == 60 * 120 * members * values
    # Spread variance (32 bits) comes from the readers and goes to those who make the maps.
    assert 60 * 120 * values < more[:3].sum() < 60 * 120 * 2 * values

"""Fixtures of the sweep tests."""

import multiprocessing
import os

import pytest
from sweep import small


@pytest.fixture(scope="session")
def spawner():
    """A server process without threads that forks child processes in a moment, with the slow imports behind it."""
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["roa.sweep.launch", "roa.loop.read", "sympy", "scipy.stats", "joblib"])
    return context


@pytest.fixture
def plan():
    return small.make()


@pytest.fixture(autouse=True)
def no_sync(monkeypatch):
    """Syncing takes most of the time of small sweeps, and only a loss of power could tell the difference."""
    monkeypatch.setattr(os, "fsync", lambda handle: None)

"""The public interface: names, typing marker, what an import costs in modules."""

import subprocess
import sys
from importlib import resources

import pytest

import entropest


def test_public_names():
    assert dir(entropest) == sorted(entropest.__all__)
    assert sorted(entropest.__all__) == [
        "Certificate",
        "ChiSquare",
        "DiagramCounts",
        "Estimate",
        "Fidelity",
        "HilbertSchmidtDistance",
        "JointSwapCounts",
        "ManyEstimates",
        "MinEntropy",
        "MomentCounts",
        "PowerSum",
        "RelativeEntropy",
        "Renyi",
        "SchurWeyl",
        "TraceDistance",
        "Tsallis",
        "TwoCopyShots",
        "Varentropy",
        "VonNeumann",
        "YoungDiagram",
        "__version__",
        "as_spectrum",
        "certify",
        "compare_spectra",
        "compare_states",
        "cycle_character",
        "estimate",
        "estimate_many",
        "estimate_together",
        "fit_likelihood",
        "free_fermion_half_chain",
        "geometric",
        "histogram_entropy",
        "identified_range",
        "identified_range_of",
        "low_rank",
        "maximally_mixed",
        "power_law",
        "random_reduced",
        "read_record",
        "recheck",
        "relative_entropy_in_eigenbasis",
        "relative_entropy_to_gibbs",
        "relative_entropy_to_mixed",
        "schur_polynomial",
        "spectrum_of_state",
        "spiked",
        "thermal",
        "write_record",
        "young_diagrams",
    ]
    assert all(hasattr(entropest, name) for name in entropest.__all__)


def test_every_public_name_has_a_docstring():
    undocumented = [name for name in entropest.__all__ if not getattr(entropest, name).__doc__]
    assert undocumented == []


def test_package_is_marked_as_typed():
    assert resources.files("entropest").joinpath("py.typed").is_file()


def test_the_import_itself_loads_nothing():
    code = "import entropest, sys; print(*sorted(sys.modules))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    assert "numpy" not in loaded
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        entropest.nothing  # noqa: B018


def test_import_stays_light():
    """Slow or optional packages are imported only by what needs them, also when every public name is used."""
    code = "from entropest import *; import sys; print(*sorted(sys.modules))"
    loaded = set(
        subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    )
    heavy = {"matplotlib", "pandas", "dask", "scipy.optimize", "scipy.stats", "scipy.integrate", "mpmath"}
    assert not heavy & loaded

import pytest
from pydantic import BaseModel, ConfigDict, Field

from reconcile.case import DomainModels, read_case
from reconcile.errors import InputError


class Strict(BaseModel):
    model_config = ConfigDict(extra="forbid")


class WaterOptions(Strict):
    unit: str
    leaks: bool = True


class WaterNode(Strict):
    stores: bool = False


class BlendOptions(Strict):
    species: list[str] = []


class BlendStream(Strict):
    density: float = Field(1.0, gt=0)
    grade: dict[str, float] = {}


MODELS = {
    "water": DomainModels(WaterOptions, None, WaterNode),
    "blend": DomainModels(BlendOptions, BlendStream, None),
    "bare": DomainModels(None),
}

HEAD = """\
reconcile: 1
domains:
  water: {unit: L/min}
streams:
  supply: outside -> header
  return: header -> outside
"""


@pytest.fixture
def models():
    return dict(MODELS)


@pytest.fixture
def read(tmp_path, monkeypatch):
    """Write a case, read it; with head=True the text follows six lines that are right."""
    monkeypatch.chdir(tmp_path)

    def _read(text, *, head=True, option_models=MODELS):
        (tmp_path / "case.yaml").write_text(HEAD + text if head else text, encoding="utf-8")
        return read_case("case.yaml", option_models=option_models)

    return _read


@pytest.fixture
def refuse(read):
    """Read a case that must be refused; return its messages, one a line."""

    def _refuse(text, **options):
        with pytest.raises(InputError) as caught:
            read(text, **options)
        return str(caught.value).splitlines()

    return _refuse


@pytest.fixture
def meter(read):
    """Read one meter of the stream supply, in L/min, from what states its sigma."""

    def _meter(keys, unit="L/min"):
        spec = read(f"meters:\n  FT-1: {{reads: supply.flow, unit: '{unit}', {keys}}}\n")
        return spec.meters["FT-1"]

    return _meter


@pytest.fixture
def refuse_meter(refuse):
    """Read one meter whose sigma must be refused; return the only message."""

    def _refuse_meter(keys, unit="L/min"):
        lines = refuse(f"meters:\n  FT-1: {{reads: supply.flow, unit: '{unit}', {keys}}}\n")
        assert len(lines) == 1, lines
        return lines[0]

    return _refuse_meter

from reconcile_energy import Energy
from reconcile_energy.options import EnergyNode, EnergyOptions, EnergyStream
from reconcile_fluid import Fluid
from reconcile_fluid.domain import FluidOptions

from reconcile import Network, System


def network(paths, streams=None, nodes=None):
    """Network whose options have passed the domain's models, as a case file's do."""
    return Network.from_paths(
        paths,
        stream_options={k: EnergyStream(**v).model_dump() for k, v in (streams or {}).items()},
        node_options={k: EnergyNode(**v).model_dump() for k, v in (nodes or {}).items()},
    )


def build(net, flow_unit="kg/s", fluid=None, **options):
    """System with the flows of the domain fluid and the heat of the domain energy."""
    system = System()
    with system.written_by("fluid"):
        Fluid().build(net, system, FluidOptions(unit=flow_unit, **(fluid or {})))
    with system.written_by("energy"):
        Energy().build(net, system, EnergyOptions(**options))
    return system

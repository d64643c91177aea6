from reconcile_mixture import Mixture
from reconcile_mixture.options import MixtureNode, MixtureOptions, MixtureStream

from reconcile import Network, System


def network(paths, streams=None, nodes=None):
    """Network whose options have passed the domain's models, as a case file's do."""
    return Network.from_paths(
        paths,
        stream_options={k: MixtureStream(**v).model_dump() for k, v in (streams or {}).items()},
        node_options={k: MixtureNode(**v).model_dump() for k, v in (nodes or {}).items()},
    )


def build(net, system=None, **options):
    system = system or System()
    with system.written_by("mixture"):
        Mixture().build(net, system, MixtureOptions(**options))
    return system

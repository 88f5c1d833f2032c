"""From rigid graphs to similarity graphs and back, for a single camera whose scale drifts (Strasdat et al. 2010).

A monocular trajectory is consistent only near each pose; its unit of length creeps. Lifting the graph to Sim(3) gives
every pose a scale, odometry the claim "scale unchanged within a deviation", and loops the scale they measured. After
solving, pose S_i = (s_i, R_i, t_i) says how long one unit of camera i is in the world: points that camera i carries
move by S_i_new S_i_old^-1, and the rigid pose is (R_i, t_i).
"""

from dataclasses import replace

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.geometry import se3, sim3
from hybridtrack.posegraph.graph import PoseGraph
from hybridtrack.posegraph.group import SE3, SIM3

Array = np.ndarray


def similarity_covariance(covariance: Array, log_scale_sigma: float) -> Array:
    """Covariance (7, 7) from one of (6, 6) and an independent deviation of the log scale."""
    if not (np.isfinite(log_scale_sigma) and log_scale_sigma > 0.0):
        raise OptionError(f"log_scale_sigma: expected a positive number, got {log_scale_sigma}")
    lifted = np.zeros((7, 7))
    lifted[:6, :6] = covariance
    lifted[6, 6] = log_scale_sigma**2
    return lifted


def similarity_graph(graph: PoseGraph, log_scale_sigma: float) -> PoseGraph:
    """Lift an SE(3) graph to Sim(3), all scales 1; every constraint measures "scale unchanged" within the deviation.

    Add loops with their own scale afterwards. Raises OptionError for another group or a deviation that is not positive.
    """
    if graph.group is not SE3:
        raise OptionError(f"similarity_graph: expected a graph on {SE3.name}, got one on {graph.group.name}")
    lifted = PoseGraph(SIM3)
    lifted.extra = dict(graph.extra)
    for pose in graph.poses:
        lifted.add_pose(pose.id, pose.t_ns, pose.world_from_camera, pose.segment, **pose.extra)
    for constraint in graph.constraints:
        lifted.add(replace(constraint, covariance=similarity_covariance(constraint.covariance, log_scale_sigma)))
    return lifted


def rigid_graph(graph: PoseGraph) -> PoseGraph:
    """The SE(3) graph of a Sim(3) graph, in world units at its present scales.

    The relative motion of a constraint is in units of its first camera, its covariance in units of its second: both
    are brought to the world's unit; verdicts and chi-squares stay those of the similarity graph.
    """
    if graph.group is not SIM3:
        raise OptionError(f"rigid_graph: expected a graph on {SIM3.name}, got one on {graph.group.name}")
    rigid = PoseGraph(SE3)
    rigid.extra = dict(graph.extra)
    scales = {-1: 1.0}
    for pose in graph.poses:
        scale, rotation, translation = sim3.decompose(pose.world_from_camera)
        scales[pose.id] = float(scale)
        rigid.add_pose(pose.id, pose.t_ns, se3.compose(rotation, translation), pose.segment, **pose.extra)
    for constraint in graph.constraints:
        scale, rotation, translation = sim3.decompose(constraint.from_from_to)
        start = scales[constraint.from_id]
        units = np.diag([start * float(scale)] * 3 + [1.0] * 3)
        covariance = units @ constraint.covariance[:6, :6] @ units
        motion = se3.compose(rotation, start * translation)
        rigid.add(replace(constraint, from_from_to=motion, covariance=covariance))
    return rigid

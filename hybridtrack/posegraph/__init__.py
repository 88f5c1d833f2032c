"""The pose graph: poses and constraints, sparse solver on SE(3) and Sim(3), robust loops, files."""

from hybridtrack.posegraph.consistency import ConsistencyResult, consistent_loops
from hybridtrack.posegraph.graph import WORLD, Constraint, Pose, PoseGraph
from hybridtrack.posegraph.graph_file import load_graph, save_graph
from hybridtrack.posegraph.group import SE3, SIM3, Group
from hybridtrack.posegraph.initialise import chordal_poses, spanning_tree_poses
from hybridtrack.posegraph.levenberg_marquardt import SolveOptions
from hybridtrack.posegraph.loss import GemanMcClure, Huber, Quadratic
from hybridtrack.posegraph.marginals import Marginals, marginal_covariances
from hybridtrack.posegraph.robust import RobustOptions, RobustResult, solve_robust
from hybridtrack.posegraph.similarity import rigid_graph, similarity_graph
from hybridtrack.posegraph.solver import SolveResult, solve

__all__ = [
    "SE3",
    "SIM3",
    "WORLD",
    "ConsistencyResult",
    "Constraint",
    "GemanMcClure",
    "Group",
    "Huber",
    "Marginals",
    "Pose",
    "PoseGraph",
    "Quadratic",
    "RobustOptions",
    "RobustResult",
    "SolveOptions",
    "SolveResult",
    "chordal_poses",
    "consistent_loops",
    "load_graph",
    "marginal_covariances",
    "rigid_graph",
    "save_graph",
    "similarity_graph",
    "solve",
    "solve_robust",
    "spanning_tree_poses",
]

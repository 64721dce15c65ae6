"""The same arm built in pinocchio (Carpentier et al., The Pinocchio C++ library, SII 2019), joint by joint."""

import numpy as np
import pinocchio

from pipeline.arm import Arm


def pinocchio_tips(arm: Arm, joints: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Tip positions (n, 3) in mm and yaws (n,) in (-pi, pi] of joints (n, 4), by pinocchio's forward kinematics.

    Its tree has no coupled joints: the quill's joint gets J3 and the lift by the turn of J4 as one value.
    """
    model = pinocchio.Model()
    up = np.array([0.0, 0.0, 1.0])
    s1, s2, s3, s4 = arm.sense
    base = _placed([*arm.base_mm[:2], arm.flange_z_mm], arm.base_yaw)
    j1 = model.addJoint(0, pinocchio.JointModelRevoluteUnaligned(s1 * up), base, "J1")
    j2 = model.addJoint(j1, pinocchio.JointModelRevoluteUnaligned(s2 * up), _placed([arm.link1_mm, 0, 0]), "J2")
    j3 = model.addJoint(j2, pinocchio.JointModelPrismaticUnaligned(s3 * up), _placed([arm.link2_mm, 0, 0]), "J3")
    j4 = model.addJoint(j3, pinocchio.JointModelRevoluteUnaligned(s4 * up), _placed([0, 0, 0]), "J4")
    tool = _placed([*arm.offset_mm, -arm.tool_length_mm], arm.tool_yaw)
    data = model.createData()
    points, yaws = np.empty((len(joints), 3)), np.empty(len(joints))
    given = joints.copy()
    given[:, 2] += s3 * s4 * arm.lead * joints[:, 3]
    for k, q in enumerate(given):
        pinocchio.forwardKinematics(model, data, q)
        tip = data.oMi[j4] * tool
        points[k], yaws[k] = tip.translation, np.arctan2(tip.rotation[1, 0], tip.rotation[0, 0])
    return points, yaws


def _placed(at: list[float], yaw: float = 0.0) -> pinocchio.SE3:
    return pinocchio.SE3(pinocchio.utils.rotate("z", yaw), np.array(at, dtype=float))

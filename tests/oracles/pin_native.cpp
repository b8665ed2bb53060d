// The rigid-body library `pin` without its Python binding: three calls in a loop, for tests/bench. Built by pin_speed.py.
// Everything comes from the library's own headers, so that it is compiled for this processor as our kernels are.

#include <cstdint>
#include <vector>

#include <pinocchio/algorithm/aba.hpp>
#include <pinocchio/algorithm/crba.hpp>
#include <pinocchio/algorithm/rnea.hpp>
#include <pinocchio/multibody.hpp>

namespace {

struct Arm {
    pinocchio::Model model;
    pinocchio::Data data;
    std::vector<Eigen::VectorXd> q, qd, third;  // one entry per state; third: accelerations or torques
};

using Matrix3 = Eigen::Matrix<double, 3, 3, Eigen::RowMajor>;

}  // namespace

#define EXPORTED extern "C" __attribute__((visibility("default")))

// A serial chain. kind: 0 revolute, 1 prismatic, both about or along z. I: about the centre of mass.
EXPORTED void *arm_make(int64_t n, const int64_t *kind, const double *R_parent, const double *p_parent, const double *mass,
                        const double *centre, const double *I, const double *rotor, const double *gravity) {
    Arm *arm = new Arm;
    pinocchio::JointIndex joint = 0;
    for (int64_t i = 0; i < n; i++) {
        const pinocchio::SE3 place(Eigen::Map<const Matrix3>(R_parent + 9 * i), Eigen::Map<const Eigen::Vector3d>(p_parent + 3 * i));
        const std::string name = "joint " + std::to_string(i);
        if (kind[i] == 0)
            joint = arm->model.addJoint(joint, pinocchio::JointModelRZ(), place, name);
        else
            joint = arm->model.addJoint(joint, pinocchio::JointModelPZ(), place, name);
        const pinocchio::Inertia body(mass[i], Eigen::Map<const Eigen::Vector3d>(centre + 3 * i), Eigen::Map<const Matrix3>(I + 9 * i));
        arm->model.appendBodyToJoint(joint, body, pinocchio::SE3::Identity());
    }
    arm->model.armature = Eigen::Map<const Eigen::VectorXd>(rotor, n);
    arm->model.gravity.linear() = Eigen::Map<const Eigen::Vector3d>(gravity);
    arm->data = pinocchio::Data(arm->model);
    return arm;
}

EXPORTED void arm_free(void *handle) { delete static_cast<Arm *>(handle); }

// `count` states, each n values.
EXPORTED void arm_states(void *handle, int64_t count, const double *q, const double *qd, const double *third) {
    Arm *arm = static_cast<Arm *>(handle);
    const int n = arm->model.nv;
    arm->q.clear(), arm->qd.clear(), arm->third.clear();
    for (int64_t k = 0; k < count; k++) {
        arm->q.emplace_back(Eigen::Map<const Eigen::VectorXd>(q + k * n, n));
        arm->qd.emplace_back(Eigen::Map<const Eigen::VectorXd>(qd + k * n, n));
        arm->third.emplace_back(Eigen::Map<const Eigen::VectorXd>(third + k * n, n));
    }
}

// The loops: `repeats` times through all states. The sum keeps the compiler from leaving anything out. Of the library's two orders
// of computation each takes the one that was faster here: its default for the inertia matrix, WORLD for forward dynamics.
EXPORTED double loop_inverse_dynamics(void *handle, int64_t repeats) {
    Arm *arm = static_cast<Arm *>(handle);
    double sum = 0.0;
    for (int64_t r = 0; r < repeats; r++)
        for (size_t k = 0; k < arm->q.size(); k++)
            sum += pinocchio::rnea(arm->model, arm->data, arm->q[k], arm->qd[k], arm->third[k])[0];
    return sum;
}

EXPORTED double loop_inertia_matrix(void *handle, int64_t repeats) {
    Arm *arm = static_cast<Arm *>(handle);
    double sum = 0.0;
    for (int64_t r = 0; r < repeats; r++)
        for (size_t k = 0; k < arm->q.size(); k++)
            sum += pinocchio::crba(arm->model, arm->data, arm->q[k], pinocchio::Convention::LOCAL)(0, 0);
    return sum;
}

EXPORTED double loop_forward_dynamics(void *handle, int64_t repeats) {
    Arm *arm = static_cast<Arm *>(handle);
    double sum = 0.0;
    for (int64_t r = 0; r < repeats; r++)
        for (size_t k = 0; k < arm->q.size(); k++)
            sum += pinocchio::aba(arm->model, arm->data, arm->q[k], arm->qd[k], arm->third[k], pinocchio::Convention::WORLD)[0];
    return sum;
}

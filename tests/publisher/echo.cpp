// Publishes what it reads, so that a test can choose every bit.
//
//     echo ENDPOINT JOINTS FEET NAME_LENGTH
//
// Input lines: `condition NAME` (the named one below, or else a bare one with program NAME), or
// `sample T_NS TAU_CMD TAU_LINK BASE FEET` (each of the last four 0 or 1: sent or not) followed by the 64-bit
// patterns, in hexadecimal, of q, qd, tau and what else is sent. Joints are named when NAME_LENGTH > 0.
#include <cstring>
#include <iostream>

#include "limbtell_publisher.hpp"

namespace {

double read_double() {
    std::uint64_t word;
    std::cin >> std::hex >> word >> std::dec;
    double value;
    std::memcpy(&value, &word, sizeof value);
    return value;
}

std::vector<double> read_row(std::size_t n, bool sent) {
    std::vector<double> row(sent ? n : 0);
    for (double& value : row) value = read_double();
    return row;
}

const double* data_or_null(const std::vector<double>& row) { return row.empty() ? nullptr : row.data(); }

void sample(limbtell::Publisher& publisher, std::size_t joints, std::size_t feet_count) {
    std::int64_t t_ns;
    bool has_tau_cmd, has_tau_link, has_base, has_feet;
    std::cin >> t_ns >> has_tau_cmd >> has_tau_link >> has_base >> has_feet;
    const auto q = read_row(joints, true), qd = read_row(joints, true), tau = read_row(joints, true);
    const auto tau_cmd = read_row(joints, has_tau_cmd), tau_link = read_row(joints, has_tau_link);
    limbtell::Base base;
    if (has_base) {
        for (double& value : base.p) value = read_double();
        for (double& value : base.quat) value = read_double();
        for (double& value : base.v) value = read_double();
        for (double& value : base.w) value = read_double();
    }
    std::vector<std::uint8_t> feet(has_feet ? feet_count : 0);
    for (std::uint8_t& foot : feet) {
        int planned;
        std::cin >> planned;
        foot = static_cast<std::uint8_t>(planned);
    }
    publisher.publish(t_ns, q.data(), qd.data(), tau.data(), data_or_null(tau_cmd), data_or_null(tau_link),
                      has_base ? &base : nullptr, has_feet ? feet.data() : nullptr);
}

limbtell::Condition condition(const std::string& name) {
    limbtell::Condition c;
    if (name == "full") {
        c.serial = "terrace-02";
        c.mode = "guided";
        c.drive = {true, false};
        c.brake = {false, true};
        c.stop = "gate open";
        c.tool = "wheel-gripper";
        c.payload = limbtell::Payload{2.5, {0.01, -0.02, 0.125}, {{{1, 2, 3}, {4, 5, 6}, {7, 8, 9}}}};
        c.support = "hoisted";
        c.program = "turn-wheels";
        c.revision = "9c1";
    } else if (name == "nothing-held") {
        c.stop = c.tool = nullptr;
        c.payload = nullptr;
    } else {
        c.program = name;
    }
    return c;
}

}  // namespace

int main(int, char** argv) {
    const std::size_t joints = std::stoul(argv[2]), feet = std::stoul(argv[3]), length = std::stoul(argv[4]);
    std::vector<std::string> names;
    for (std::size_t j = 0; j < joints && length > 0; ++j)
        names.push_back(std::to_string(j) + std::string(length, '_'));
    limbtell::Publisher publisher(joints, argv[1], 64, names, feet);
    publisher.set_condition(condition("ready"));
    std::string word;
    while (std::cin >> word) {
        if (word == "sample") {
            sample(publisher, joints, feet);
        } else {
            std::cin >> word;
            publisher.set_condition(condition(word));
        }
    }
}

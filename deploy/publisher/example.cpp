// A control loop at a fixed rate that publishes sinusoidal joint motion, as a pattern for a real one.
//
//     example ENDPOINT RATE_HZ SECONDS JOINTS [--burst]
//
// With --burst it does not wait between samples, which overflows the ring: the RATE_HZ * SECONDS samples go
// out as fast as publish() returns. The last line of output is JSON: samples published, samples dropped, and
// the longest time that publish() took.
#include <algorithm>
#include <atomic>
#include <chrono>
#include <cmath>
#include <cstdint>
#include <cstdio>
#include <cstdlib>
#include <exception>
#include <stdexcept>
#include <string>
#include <thread>
#include <time.h>
#include <vector>

#include "limbtell_publisher.hpp"

namespace {

constexpr std::int64_t kSecond_ns = 1000000000;

std::int64_t now_ns() {
    timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return t.tv_sec * kSecond_ns + t.tv_nsec;
}

void sleep_until_ns(std::int64_t deadline_ns) {
    timespec t;
    t.tv_sec = static_cast<time_t>(deadline_ns / kSecond_ns);
    t.tv_nsec = static_cast<long>(deadline_ns % kSecond_ns);
    while (clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, &t, nullptr) != 0) {
    }
}

struct Count {
    std::int64_t published = 0, worst_ns = 0;
};

Count control_loop(limbtell::Publisher& publisher, std::size_t joints, double rate_hz, double seconds,
                   bool burst) {
    std::vector<double> q(joints), qd(joints), tau(joints);
    const double omega = 2 * std::acos(-1.0) * 0.5;  // half a turn of phase a second
    const auto samples = static_cast<std::int64_t>(rate_hz * seconds);
    const std::int64_t start_ns = now_ns();
    Count count;
    for (std::int64_t k = 0; k < samples; ++k) {
        // Deadlines are absolute, so a late cycle does not shift the ones after it.
        const auto deadline_ns = start_ns + static_cast<std::int64_t>(static_cast<double>(k) * 1e9 / rate_hz);
        if (!burst) sleep_until_ns(deadline_ns);
        const std::int64_t t_ns = now_ns();
        const double t = static_cast<double>(t_ns - start_ns) * 1e-9;
        for (std::size_t j = 0; j < joints; ++j) {
            const double phase = omega * t + static_cast<double>(j);
            q[j] = 0.3 * std::sin(phase);
            qd[j] = 0.3 * omega * std::cos(phase);
            tau[j] = 2.0 * std::sin(phase);
        }
        const std::int64_t before_ns = now_ns();
        count.published += publisher.publish(t_ns, q.data(), qd.data(), tau.data());
        count.worst_ns = std::max(count.worst_ns, now_ns() - before_ns);
    }
    return count;
}

double positive(const char* name, const char* text) {
    char* end = nullptr;
    const double value = std::strtod(text, &end);
    if (end == text || *end != '\0' || !(value > 0) || !std::isfinite(value))
        throw std::invalid_argument(std::string(name) + ": found " + text + "; expected a number above 0");
    return value;
}

void run(const std::string& endpoint, double rate_hz, double seconds, std::size_t joints, bool burst) {
    limbtell::Publisher publisher(joints, endpoint);
    limbtell::Condition condition;
    condition.serial = "rind-07";
    condition.mode = "work";
    condition.drive.assign(joints, true);
    condition.brake.assign(joints, false);
    condition.stop = nullptr;
    condition.tool = "wheel-gripper";
    condition.payload = nullptr;
    condition.program = "turn-wheels";
    condition.revision = "4";
    publisher.set_condition(condition);
    // Who subscribes later misses what went before; this only gives a waiting monitor time to connect.
    std::this_thread::sleep_for(std::chrono::milliseconds(500));

    Count count;
    std::atomic<bool> running{true};
    std::thread control([&] {
        count = control_loop(publisher, joints, rate_hz, seconds, burst);
        running = false;
    });
    // Condition comes from a thread without deadlines: here the program changes about every second.
    for (int wait = 1; running; ++wait) {
        std::this_thread::sleep_for(std::chrono::milliseconds(10));
        condition.program = wait / 100 % 2 == 0 ? "turn-wheels" : "brush-wheels";
        publisher.set_condition(condition);  // sends nothing when nothing changed
    }
    control.join();
    std::printf("{\"published\": %lld, \"dropped\": %lld, \"worst_publish_ns\": %lld}\n",
                static_cast<long long>(count.published), static_cast<long long>(publisher.dropped()),
                static_cast<long long>(count.worst_ns));
}

}  // namespace

int main(int argc, char** argv) {
    const bool burst = argc == 6 && std::string(argv[5]) == "--burst";
    if (argc != 5 && !burst) {
        std::fprintf(stderr, "usage: example ENDPOINT RATE_HZ SECONDS JOINTS [--burst]\n");
        return 2;
    }
    try {
        run(argv[1], positive("RATE_HZ", argv[2]), positive("SECONDS", argv[3]),
            static_cast<std::size_t>(positive("JOINTS", argv[4])), burst);
        return 0;
    } catch (const std::exception& error) {
        std::fprintf(stderr, "example: %s\n", error.what());
        return 1;
    }
}

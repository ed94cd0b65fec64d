// Makes samples be lost where the test wants it, by standing in for zmq_send.
//
//     losses ENDPOINT stall | refuse | interrupt
//
// `stall`: the sender is held inside its first send while CAPACITY + 5 samples are published; then it goes on
// and one more sample follows. `refuse`: of 30 samples every third is refused. `interrupt`: of 30 samples
// every third is interrupted by a signal once. Starts when a line comes in; prints Publisher::dropped().
#include <dlfcn.h>

#include <iostream>

#include "limbtell_publisher.hpp"

namespace {

constexpr std::size_t kCapacity = 8;
constexpr int kSamples = 30;

std::string mode;
std::atomic<int> attempts{0};  // of the topic frame of a sample
std::atomic<bool> released{false};

void nap() { std::this_thread::sleep_for(std::chrono::milliseconds(1)); }

int fail_with(int error) {
    errno = error;
    return -1;
}

bool publish(limbtell::Publisher& publisher) {
    const double row[] = {1.0};
    return publisher.publish(0, row, row, row);
}

void stall(limbtell::Publisher& publisher) {
    publish(publisher);
    while (attempts < 1) nap();
    for (std::size_t k = 0; k < kCapacity + 5; ++k) publish(publisher);
    released = true;
    while (attempts < 1 + static_cast<int>(kCapacity)) nap();
    publish(publisher);
}

void publish_each(limbtell::Publisher& publisher) {
    for (int k = 0; k < kSamples; ++k) {
        const int before = attempts;
        publish(publisher);
        while (attempts == before) nap();
    }
}

}  // namespace

extern "C" int zmq_send(void* socket, const void* data, std::size_t size, int flags) {
    static const auto real = reinterpret_cast<decltype(&zmq_send)>(dlsym(RTLD_NEXT, "zmq_send"));
    if (std::string_view(static_cast<const char*>(data), size) == "joints") {
        const int attempt = ++attempts;
        if (mode == "stall")
            while (!released) nap();
        if (mode == "refuse" && attempt % 3 == 0) return fail_with(EAGAIN);
        if (mode == "interrupt" && attempt % 3 == 0) return fail_with(EINTR);
    }
    return real(socket, data, size, flags);
}

int main(int, char** argv) {
    mode = argv[2];
    limbtell::Publisher publisher(1, argv[1], kCapacity);
    limbtell::Condition ready;
    ready.program = "ready";
    publisher.set_condition(ready);
    std::string line;
    std::getline(std::cin, line);
    mode == "stall" ? stall(publisher) : publish_each(publisher);
    std::printf("%ld\n", static_cast<long>(publisher.dropped()));
}

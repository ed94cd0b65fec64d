// Counts the allocations of publish(), or forbids its thread every system call.
//
//     realtime ENDPOINT allocations | syscalls | forbidden-syscall
//
// `allocations` prints two numbers: those of 100 000 calls of publish(), and those of one `new`, which must
// be seen. `syscalls` runs the same calls in a thread that the kernel kills at any system call but exit(2),
// and prints how many returned; `forbidden-syscall` makes one such call, and must die of it.
#include <linux/filter.h>
#include <linux/seccomp.h>
#include <sys/prctl.h>
#include <sys/syscall.h>
#include <unistd.h>

#include <cstdlib>
#include <new>

#include "limbtell_publisher.hpp"

namespace {

constexpr int kCalls = 100000;
constexpr std::size_t kJoints = 7;
constexpr int kNotSupported = 77;

thread_local bool counting = false;
thread_local long allocations = 0;

}  // namespace

// The allocator of the C library below malloc; `operator new` of the standard library calls malloc.
extern "C" {
void* __libc_malloc(std::size_t);
void* __libc_calloc(std::size_t, std::size_t);
void* __libc_realloc(void*, std::size_t);

void* malloc(std::size_t size) {
    allocations += counting;
    return __libc_malloc(size);
}
void* calloc(std::size_t n, std::size_t size) {
    allocations += counting;
    return __libc_calloc(n, size);
}
void* realloc(void* old, std::size_t size) {
    allocations += counting;
    return __libc_realloc(old, size);
}
}

namespace {

// The ring takes half of them, so both outcomes of publish() are covered.
long publish_all(limbtell::Publisher& publisher) {
    const double row[kJoints] = {};
    const limbtell::Base base;
    const std::uint8_t feet[4] = {};
    long accepted = 0;
    for (int k = 0; k < kCalls; ++k) accepted += publisher.publish(k, row, row, row, row, row, &base, feet);
    return accepted;
}

bool forbid_system_calls() {
    sock_filter program[] = {
        BPF_STMT(BPF_LD | BPF_W | BPF_ABS, offsetof(seccomp_data, nr)),
        BPF_JUMP(BPF_JMP | BPF_JEQ | BPF_K, SYS_exit, 0, 1),
        BPF_STMT(BPF_RET | BPF_K, SECCOMP_RET_ALLOW),
        BPF_STMT(BPF_RET | BPF_K, SECCOMP_RET_KILL_PROCESS),
    };
    const sock_fprog filter{4, program};
    return prctl(PR_SET_NO_NEW_PRIVS, 1, 0, 0, 0) == 0 &&
           prctl(PR_SET_SECCOMP, SECCOMP_MODE_FILTER, &filter) == 0;
}

}  // namespace

int main(int, char** argv) {
    const std::string mode = argv[2];
    limbtell::Publisher publisher(kJoints, argv[1], kCalls / 2, {}, 4);
    if (mode == "allocations") {
        counting = true;
        const long accepted = publish_all(publisher);
        const long by_publish = allocations;
        ::operator delete(::operator new(8));
        counting = false;
        std::printf("%ld %ld %ld %ld\n", by_publish, allocations - by_publish, accepted,
                    static_cast<long>(publisher.dropped()));
        return 0;
    }
    std::atomic<bool> supported{true}, returned{false};
    std::thread control([&] {
        supported = forbid_system_calls();
        if (!supported) return;
        publish_all(publisher);
        if (mode == "forbidden-syscall") getppid();
        returned = true;
        syscall(SYS_exit, 0);  // the thread's ordinary end would make other calls
    });
    control.join();
    if (!supported) return kNotSupported;
    std::printf("%s\n", returned ? "returned" : "killed");
    return 0;
}

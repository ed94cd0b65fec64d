// Publishes the joint measurements and the condition of a robot to limbtell over ZeroMQ.
//
// One header, C++17; needs the standard library and libzmq's C interface (link with -lzmq -pthread).
// The control thread only copies into a bounded ring; a sender thread encodes and sends. See README.md.
// limbtell is a monitoring aid, never a safety function.
#pragma once

#include <zmq.h>

#include <array>
#include <atomic>
#include <cerrno>
#include <chrono>
#include <cstddef>
#include <cstdint>
#include <cstdio>
#include <cstring>
#include <memory>
#include <mutex>
#include <random>
#include <stdexcept>
#include <string>
#include <string_view>
#include <thread>
#include <utility>
#include <variant>
#include <vector>

namespace limbtell {

// Measured state of a floating base.
struct Base {
    std::array<double, 3> p{};               // position in the world [m]
    std::array<double, 4> quat{1, 0, 0, 0};  // orientation, base to world, w x y z
    std::array<double, 3> v{};               // velocity of the base origin, in world axes [m/s]
    std::array<double, 3> w{};               // angular velocity, in body axes [rad/s]
};

// What the tool carries, in the tool frame.
struct Payload {
    double m = 0;                                    // mass [kg]
    std::array<double, 3> c{};                       // centre of mass [m]
    std::array<std::array<double, 3>, 3> inertia{};  // about the centre of mass [kg m²], sent as `I`
};

// Either unknown (std::monostate, not sent), known to be none (nullptr, sent as null), or a value.
template <class T>
using Known = std::variant<std::monostate, std::nullptr_t, T>;

// Condition of the robot, topic `robot`. What is left empty is unknown and not sent; the monitor then
// watches only conditionally and says why, so fill in what the robot knows.
struct Condition {
    std::string serial;
    std::string mode;                // work, guided, calibrating or stopped
    std::vector<bool> drive, brake;  // per joint: powered, closed
    Known<std::string> stop;         // cause of the stop
    Known<std::string> tool;
    Known<Payload> payload;
    std::string support;  // ground, hoisted, carried or docked
    std::string program, revision;
};

namespace detail {

// A msgpack map under construction: just the types the wire needs (msgpack specification, version 5).
// The buffer keeps its capacity, so re-using a message allocates nothing.
class Message {
public:
    void begin() {
        bytes_.assign({'\xde', '\0', '\0'});  // a map16 whose count finish() fills in
        keys_ = 0;
    }
    void key(std::string_view name) {
        ++keys_;
        text(name);
    }
    void finish() {
        bytes_[1] = static_cast<char>(keys_ >> 8);
        bytes_[2] = static_cast<char>(keys_ & 0xff);
    }
    void map(std::size_t n) { header(n, 0x80, 16, 0xde); }
    void array(std::size_t n) { header(n, 0x90, 16, 0xdc); }
    void nil() { byte(0xc0); }
    void flag(bool value) { byte(value ? 1 : 0); }
    void integer(std::int64_t value) {
        byte(0xd3);
        big_endian(static_cast<std::uint64_t>(value), 8);
    }
    void real(double value) {
        byte(0xcb);
        big_endian(bits(value), 8);
    }
    void text(std::string_view value) {
        header(value.size(), 0xa0, 32, 0xda);
        bytes_.append(value);
    }
    // Raw little-endian float64 on every machine.
    void binary(const double* values, std::size_t n) {
        header(8 * n, 0, 0, 0xc5);
        for (std::size_t i = 0; i < n; ++i) {
            const std::uint64_t word = bits(values[i]);
            char out[8];
            for (int b = 0; b < 8; ++b) out[b] = static_cast<char>(word >> (8 * b) & 0xff);
            bytes_.append(out, 8);
        }
    }
    template <std::size_t N>
    void reals(const std::array<double, N>& values) {
        array(N);
        for (double value : values) real(value);
    }

    const std::string& bytes() const { return bytes_; }
    void reserve(std::size_t size) { bytes_.reserve(size); }

private:
    static std::uint64_t bits(double value) {
        static_assert(sizeof(double) == sizeof(std::uint64_t));
        std::uint64_t word;
        std::memcpy(&word, &value, sizeof word);
        return word;
    }
    void byte(unsigned value) { bytes_.push_back(static_cast<char>(value)); }
    void big_endian(std::uint64_t value, int size) {
        for (int b = size - 1; b >= 0; --b) byte(static_cast<unsigned>(value >> (8 * b) & 0xff));
    }
    // Size of a map, array, text or binary: within the code byte, or in 16 or 32 bits after it.
    void header(std::size_t n, unsigned small_code, std::size_t small_limit, unsigned code16) {
        if (n < small_limit) {
            byte(small_code | static_cast<unsigned>(n));
        } else if (n <= 0xffff) {
            byte(code16);
            big_endian(n, 2);
        } else {
            byte(code16 + 1);
            big_endian(n, 4);
        }
    }

    std::string bytes_;
    std::size_t keys_ = 0;
};

inline int end_context(void* context) {
    int rc;
    do rc = zmq_ctx_term(context);
    while (rc != 0 && zmq_errno() == EINTR);
    return rc;
}

using Context = std::unique_ptr<void, int (*)(void*)>;
using Socket = std::unique_ptr<void, int (*)(void*)>;

inline std::runtime_error zmq_error(const std::string& what) {
    return std::runtime_error("limbtell publisher: " + what + ": " + zmq_strerror(zmq_errno()));
}

}  // namespace detail

class Publisher {
public:
    // Binds a PUB socket to `endpoint` and starts the sender thread; all memory is taken here.
    //
    // `ring_capacity` samples are kept while the sender is held up: at 1 kHz the default bears one second.
    // `names` (empty, or one per joint) go with every sample; without them the monitor's configured order
    // holds. `feet` is the length of the array given to publish(). `poll` is how often the sender looks into
    // the ring: to wake it the control thread would have to make a system call, so it looks by itself. A
    // shorter poll costs more of a core, a longer one delays samples by up to its length.
    // Throws std::invalid_argument for impossible sizes, std::runtime_error when binding fails.
    // The sender inherits the scheduling of the calling thread: construct before raising its priority.
    Publisher(std::size_t joints, const std::string& endpoint, std::size_t ring_capacity = 1024,
              std::vector<std::string> names = {}, std::size_t feet = 0,
              std::chrono::microseconds poll = std::chrono::microseconds(200))
        : joints_(joints), feet_(feet), poll_(poll), names_(std::move(names)), boot_(random_id()),
          slots_(ring_capacity), values_(ring_capacity * kRows * joints), contacts_(ring_capacity * feet),
          context_(zmq_ctx_new(), detail::end_context), socket_(nullptr, zmq_close) {
        require(joints > 0, "found no joints; expected at least 1");
        require(ring_capacity > 0, "found ring_capacity 0; expected at least 1");
        require(names_.empty() || names_.size() == joints, "found " + std::to_string(names_.size()) +
                                                               " names; expected none or " +
                                                               std::to_string(joints));
        bind(endpoint);
        reserve_message();
        sender_ = std::thread(&Publisher::run, this);
    }

    // Sends what is in the ring, then gives the network `kLingerMs` to take it. The control thread must have
    // stopped calling publish().
    ~Publisher() {
        stopping_.store(true, std::memory_order_release);
        sender_.join();
    }

    Publisher(const Publisher&) = delete;
    Publisher& operator=(const Publisher&) = delete;

    // Hands over one sample; for one control thread. Never allocates, locks, blocks or makes a system call.
    //
    // `t_ns` is the robot's clock [ns]. `q` [rad or m], `qd` and `tau` [Nm or N] hold one value per joint, in
    // the order of `names`; `tau_cmd` (commanded) and `tau_link` (measured at the link) likewise, or null.
    // `base` and `feet` (planned contact per foot, 0 or 1) are for walking robots, or null.
    // Returns false when the ring is full: the sample is dropped and counted, and its `seq` is used up, so
    // that the receiver sees the gap.
    bool publish(std::int64_t t_ns, const double* q, const double* qd, const double* tau,
                 const double* tau_cmd = nullptr, const double* tau_link = nullptr,
                 const Base* base = nullptr, const std::uint8_t* feet = nullptr) noexcept {
        const std::int64_t seq = seq_++;
        const std::uint64_t head = head_.load(std::memory_order_relaxed);
        if (head - tail_.load(std::memory_order_acquire) == slots_.size()) {
            ring_drops_.fetch_add(1, std::memory_order_relaxed);
            return false;
        }
        const std::size_t index = head % slots_.size();
        Slot& slot = slots_[index];
        slot.t_ns = t_ns;
        slot.seq = seq;
        slot.drops_before = ring_drops_.load(std::memory_order_relaxed);
        const double* rows[kRows] = {q, qd, tau, tau_cmd, tau_link};
        for (std::size_t row = 0; row < kRows; ++row) {
            slot.has_row[row] = rows[row] != nullptr;
            if (slot.has_row[row]) std::memcpy(row_of(index, row), rows[row], joints_ * sizeof(double));
        }
        slot.has_base = base != nullptr;
        if (slot.has_base) slot.base = *base;
        slot.has_feet = feet != nullptr && feet_ > 0;
        if (slot.has_feet) std::memcpy(&contacts_[index * feet_], feet, feet_);
        head_.store(head + 1, std::memory_order_release);
        return true;
    }

    // States the condition of the robot; from any thread but the control thread: it locks and allocates.
    //
    // Sent at once, before every sample that is published after this call returns, and repeated every
    // `kConditionPeriod`. It is a state: of two changes within one poll of the sender only the later is sent.
    // Throws std::invalid_argument when `drive` or `brake` is neither empty nor one per joint.
    void set_condition(const Condition& condition) {
        for (std::size_t n : {condition.drive.size(), condition.brake.size()})
            require(n == 0 || n == joints_, "found " + std::to_string(n) +
                                                " values of drive or brake; expected none or " +
                                                std::to_string(joints_));
        detail::Message message;
        encode(condition, message);
        const std::lock_guard<std::mutex> lock(condition_mutex_);
        if (message.bytes() == condition_.bytes()) return;
        condition_ = std::move(message);
        condition_changed_.store(true, std::memory_order_release);
    }

    // Samples lost on this side so far: ring full, or refused by ZeroMQ.
    std::int64_t dropped() const {
        return ring_drops_.load(std::memory_order_relaxed) + send_drops_.load(std::memory_order_relaxed);
    }

    // Identity of this power-up: 64 random bits in hexadecimal.
    const std::string& boot() const { return boot_; }

private:
    static constexpr std::size_t kRows = 5;
    static constexpr std::array<std::string_view, kRows> kRowNames{"q", "qd", "tau", "tau_cmd", "tau_link"};
    static constexpr std::size_t kCacheLine = 64;
    // The monitor wants it once a second; half of that leaves room for a busy machine.
    static constexpr std::chrono::milliseconds kConditionPeriod{500};
    static constexpr int kLingerMs = 200;

    static_assert(std::atomic<std::uint64_t>::is_always_lock_free, "the ring would lock here");
    static_assert(std::atomic<std::int64_t>::is_always_lock_free, "the counters would lock here");

    struct Slot {
        std::int64_t t_ns = 0, seq = 0, drops_before = 0;
        std::array<bool, kRows> has_row{};
        bool has_base = false, has_feet = false;
        Base base;
    };

    static void require(bool holds, const std::string& what) {
        if (!holds) throw std::invalid_argument("limbtell publisher: " + what);
    }

    static std::string random_id() {
        std::random_device random;
        char text[17];
        std::snprintf(text, sizeof text, "%08x%08x", static_cast<unsigned>(random()),
                      static_cast<unsigned>(random()));
        return text;
    }

    double* row_of(std::size_t index, std::size_t row) noexcept {
        return &values_[(index * kRows + row) * joints_];
    }

    void bind(const std::string& endpoint) {
        if (!context_) throw detail::zmq_error("cannot make a context");
        socket_.reset(zmq_socket(context_.get(), ZMQ_PUB));
        if (!socket_) throw detail::zmq_error("cannot make a socket");
        if (zmq_setsockopt(socket_.get(), ZMQ_LINGER, &kLingerMs, sizeof kLingerMs) != 0)
            throw detail::zmq_error("cannot set the linger time");
        if (zmq_bind(socket_.get(), endpoint.c_str()) != 0)
            throw detail::zmq_error("cannot bind to " + endpoint);
    }

    // Room for the largest sample, so that the sender never runs out of memory in the control process.
    void reserve_message() {
        std::size_t size = 512 + kRows * joints_ * sizeof(double) + feet_;
        for (const std::string& name : names_) size += name.size() + 5;
        message_.reserve(size);
    }

    // ---- sender thread

    void run() {
        while (!stopping_.load(std::memory_order_acquire)) {
            send_samples();
            send_condition_when_due();
            std::this_thread::sleep_for(poll_);
        }
        send_samples();
        send_condition_when_due();
    }

    void send_samples() {
        std::uint64_t tail = tail_.load(std::memory_order_relaxed);
        while (tail != head_.load(std::memory_order_acquire)) {
            send_condition_when_due();  // never later than a sample published after it
            encode(tail % slots_.size(), message_);
            tail_.store(++tail, std::memory_order_release);
            if (!send("joints", message_.bytes())) send_drops_.fetch_add(1, std::memory_order_relaxed);
        }
    }

    void send_condition_when_due() {
        const auto now = std::chrono::steady_clock::now();
        if (!condition_changed_.load(std::memory_order_acquire) && now < condition_due_) return;
        const std::lock_guard<std::mutex> lock(condition_mutex_);
        if (condition_.bytes().empty() || !send("robot", condition_.bytes())) return;  // tried again soon
        condition_changed_.store(false, std::memory_order_relaxed);
        condition_due_ = now + kConditionPeriod;
    }

    void encode(std::size_t index, detail::Message& message) {
        const Slot& slot = slots_[index];
        message.begin();
        message.key("v"), message.integer(1);
        message.key("seq"), message.integer(slot.seq);
        message.key("t_ns"), message.integer(slot.t_ns);
        // Drops up to this sample, in the order of `seq`: a gap in `seq` without a rise was lost on the way.
        const std::int64_t send_drops = send_drops_.load(std::memory_order_relaxed);
        message.key("drops"), message.integer(slot.drops_before + send_drops);
        for (std::size_t row = 0; row < kRows; ++row)
            if (slot.has_row[row]) message.key(kRowNames[row]), message.binary(row_of(index, row), joints_);
        if (!names_.empty()) {
            message.key("names"), message.array(joints_);
            for (const std::string& name : names_) message.text(name);
        }
        if (slot.has_base) {
            message.key("base"), message.map(4);
            message.text("p"), message.reals(slot.base.p);
            message.text("quat"), message.reals(slot.base.quat);
            message.text("v"), message.reals(slot.base.v);
            message.text("w"), message.reals(slot.base.w);
        }
        if (slot.has_feet) {
            message.key("feet"), message.array(feet_);
            for (std::size_t i = 0; i < feet_; ++i) message.flag(contacts_[index * feet_ + i] != 0);
        }
        message.finish();
    }

    // The topic goes out only when the payload has its memory: half a message would garble the next one.
    bool send(std::string_view topic, const std::string& payload) {
        zmq_msg_t frame;
        if (zmq_msg_init_size(&frame, payload.size()) != 0) return false;
        std::memcpy(zmq_msg_data(&frame), payload.data(), payload.size());
        void* socket = socket_.get();
        const int first = ZMQ_SNDMORE | ZMQ_DONTWAIT;
        const bool sent = uninterrupted([&] { return zmq_send(socket, topic.data(), topic.size(), first); }) &&
                          uninterrupted([&] { return zmq_msg_send(&frame, socket, ZMQ_DONTWAIT); });
        if (!sent) zmq_msg_close(&frame);
        return sent;
    }

    template <class Call>
    static bool uninterrupted(Call call) {
        int rc;
        do rc = call();
        while (rc < 0 && zmq_errno() == EINTR);
        return rc >= 0;
    }

    // ---- caller of set_condition()

    void encode(const Condition& condition, detail::Message& message) const {
        const auto text = [&](std::string_view key, const std::string& value) {
            if (!value.empty()) message.key(key), message.text(value);
        };
        const auto flags = [&](std::string_view key, const std::vector<bool>& values) {
            if (values.empty()) return;
            message.key(key), message.array(values.size());
            for (bool value : values) message.flag(value);
        };
        const auto known = [&](std::string_view key, const auto& value, const auto& write) {
            if (std::holds_alternative<std::monostate>(value)) return;
            message.key(key);
            std::holds_alternative<std::nullptr_t>(value) ? message.nil() : write(std::get<2>(value));
        };
        const auto write_text = [&](const std::string& value) { message.text(value); };
        message.begin();
        text("boot", boot_);
        text("serial", condition.serial);
        text("mode", condition.mode);
        flags("drive", condition.drive);
        flags("brake", condition.brake);
        known("stop", condition.stop, write_text);
        known("tool", condition.tool, write_text);
        known("payload", condition.payload, [&](const Payload& payload) {
            message.map(3);
            message.text("m"), message.real(payload.m);
            message.text("c"), message.reals(payload.c);
            message.text("I"), message.array(3);
            for (const auto& row : payload.inertia) message.reals(row);
        });
        text("support", condition.support);
        text("program", condition.program);
        text("revision", condition.revision);
        message.finish();
    }

    const std::size_t joints_, feet_;
    const std::chrono::microseconds poll_;
    const std::vector<std::string> names_;
    const std::string boot_;

    // The ring: slot `n % capacity` is the sender's while tail <= n < head, else the control thread's.
    // What each of them writes lies in cache lines of its own.
    std::vector<Slot> slots_;
    std::vector<double> values_;
    std::vector<std::uint8_t> contacts_;
    alignas(kCacheLine) std::atomic<std::uint64_t> head_{0};  // written by the control thread
    std::atomic<std::int64_t> ring_drops_{0};                 // written by the control thread
    std::int64_t seq_ = 0;                                    // control thread only
    alignas(kCacheLine) std::atomic<std::uint64_t> tail_{0};  // written by the sender
    std::atomic<std::int64_t> send_drops_{0};                 // written by the sender
    detail::Message message_;                                 // sender only
    std::chrono::steady_clock::time_point condition_due_{};   // sender only

    alignas(kCacheLine) std::atomic<bool> condition_changed_{false};
    std::atomic<bool> stopping_{false};
    std::mutex condition_mutex_;
    detail::Message condition_;  // encoded; guarded by condition_mutex_

    detail::Context context_;  // outlives the socket
    detail::Socket socket_;
    std::thread sender_;
};

}  // namespace limbtell

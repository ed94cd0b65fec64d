// Asks for impossible publishers and conditions; prints each refusal on a line of its own.
//
//     refusals ENDPOINT
#include <functional>

#include "limbtell_publisher.hpp"

int main(int, char** argv) {
    const std::string endpoint = argv[1];
    limbtell::Publisher publisher(2, endpoint);
    limbtell::Condition one_brake;
    one_brake.brake = {true};
    const std::function<void()> wrong[] = {
        [&] { limbtell::Publisher(0, endpoint + "2"); },
        [&] { limbtell::Publisher(2, endpoint + "2", 0); },
        [&] { limbtell::Publisher(2, endpoint + "2", 8, {"hip", "knee", "ankle"}); },
        [&] { limbtell::Publisher(2, "nonsense"); },
        [&] { publisher.set_condition(one_brake); },
    };
    for (const auto& attempt : wrong) {
        try {
            attempt();
            std::puts("accepted");
        } catch (const std::exception& error) {
            std::puts(error.what());
        }
    }
}

#include "daemon/commands.hpp"

int main(int argc, char** argv) {
    return process::run(argc, argv);
}

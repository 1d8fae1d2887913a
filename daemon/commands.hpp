#pragma once

namespace process {

// The command line. Exit code: 0 done, 2 wrong usage or configuration, 1 any other failure.
int run(int argc, char** argv);

}  // namespace process

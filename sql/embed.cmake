# Writes a C++ file that carries the schema steps inside the program.
#
#     cmake -DOUTPUT=schema_steps.cpp "-DSTEPS=001_inputs.sql;002_results.sql" -P embed.cmake
#
# Every byte is written as an escape, so that no sequence of characters in the SQL can mean something
# to CMake or to the compiler: what the program runs, and signs with a checksum, is the file.

set(texts "")
set(rows "")
foreach(step IN LISTS STEPS)
    get_filename_component(stem "${step}" NAME_WE)
    if(NOT stem MATCHES "^([0-9][0-9][0-9])_([a-z0-9_]+)$")
        message(FATAL_ERROR "${step}: a schema step is named like 001_inputs.sql")
    endif()
    set(name "${CMAKE_MATCH_2}")
    math(EXPR number "1${CMAKE_MATCH_1} - 1000")    # 008 is not octal
    file(READ "${step}" bytes HEX)
    string(REGEX REPLACE "([0-9a-f][0-9a-f])" "\\\\x\\1" bytes "${bytes}")
    string(REGEX REPLACE "(\\\\x0a)" "\\1\"\n    \"" bytes "${bytes}")    # one line of ours a line of SQL
    string(APPEND texts "constexpr char text_${number}[] =\n    \"${bytes}\";\n")
    string(APPEND rows "    {${number}, \"${name}\", {text_${number}, sizeof text_${number} - 1}},\n")
endforeach()

file(WRITE "${OUTPUT}" "#include \"daemon/schema.hpp\"

namespace process {
namespace {

${texts}
constexpr SchemaStep steps[] = {
${rows}};

}  // namespace

std::span<SchemaStep const> schema_steps() { return steps; }

}  // namespace process
")

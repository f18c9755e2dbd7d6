# Run by `cmake -P`; the variables come from CMakeLists.txt beside this file.
file(REMOVE_RECURSE ${SCRATCH})
set(prefix ${SCRATCH}/prefix)
set(build ${SCRATCH}/build)

function(run)
  execute_process(COMMAND ${ARGN} COMMAND_ERROR_IS_FATAL ANY)
endfunction()

run(${CMAKE_COMMAND} --install ${BUILD} --prefix ${prefix})
run(${CMAKE_COMMAND} -S ${SOURCE} -B ${build} -G ${GENERATOR} -DCMAKE_PREFIX_PATH=${prefix}
    -DCMAKE_CXX_COMPILER=${COMPILER} -DCMAKE_CXX_FLAGS=${FLAGS} -DCMAKE_BUILD_TYPE=Release)
run(${CMAKE_COMMAND} --build ${build})

# The package found must be the one just installed.
file(STRINGS ${build}/CMakeCache.txt found REGEX "^leadsman_DIR:")
string(FIND "${found}" "${prefix}/" place)
if(place EQUAL -1)
  message(FATAL_ERROR "another package was found: ${found}")
endif()

execute_process(COMMAND ${build}/embed ${BUNDLE} ${PICTURE}
                OUTPUT_VARIABLE output COMMAND_ERROR_IS_FATAL ANY COMMAND_ECHO STDOUT)
message("${output}")
# The installed tool must agree with the program built on the library.
execute_process(COMMAND ${prefix}/bin/leadsman classify ${BUNDLE} ${PICTURE} --top 1 --json
                OUTPUT_VARIABLE answer COMMAND_ERROR_IS_FATAL ANY)
string(JSON label GET "${answer}" top 0 label)
if(NOT output MATCHES "thread 0: +[0-9.]+% ${label}\n" OR
   NOT output MATCHES "thread 1: +[0-9.]+% ${label}\n")
  message(FATAL_ERROR "the tool says ${label}")
endif()

# Boards with a 64-bit Arm processor, built on a Debian x86 machine (g++-aarch64-linux-gnu) as one
# static file to copy over. Tests run here under user emulation (qemu-user-static).
set(CMAKE_SYSTEM_NAME Linux)
set(CMAKE_SYSTEM_PROCESSOR aarch64)
set(CMAKE_C_COMPILER aarch64-linux-gnu-gcc)
set(CMAKE_CXX_COMPILER aarch64-linux-gnu-g++)
set(CMAKE_EXE_LINKER_FLAGS_INIT -static)

find_program(LEADSMAN_QEMU qemu-aarch64-static)
if(LEADSMAN_QEMU)
  # The oldest kind of core: code for a newer one would stop with an illegal instruction.
  set(CMAKE_CROSSCOMPILING_EMULATOR ${LEADSMAN_QEMU};-cpu;cortex-a53)
endif()

# Programs and headers of the build machine (the libraries used are headers only), no libraries.
set(CMAKE_FIND_ROOT_PATH /usr/aarch64-linux-gnu)
set(CMAKE_FIND_ROOT_PATH_MODE_PROGRAM NEVER)
set(CMAKE_FIND_ROOT_PATH_MODE_INCLUDE BOTH)
set(CMAKE_FIND_ROOT_PATH_MODE_LIBRARY ONLY)
set(CMAKE_FIND_ROOT_PATH_MODE_PACKAGE ONLY)

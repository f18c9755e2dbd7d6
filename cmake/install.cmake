# What `cmake --install` lays down: the tool, the library, its public headers and the files that
# find_package(leadsman) reads.
include(CMakePackageConfigHelpers)

set(package_dir ${CMAKE_INSTALL_LIBDIR}/cmake/leadsman)

install(TARGETS leadsman EXPORT leadsman-targets ARCHIVE DESTINATION ${CMAKE_INSTALL_LIBDIR})
install(DIRECTORY include/leadsman DESTINATION ${CMAKE_INSTALL_INCLUDEDIR}
        FILES_MATCHING PATTERN "*.h")
if(TARGET leadsman_tool)
  install(TARGETS leadsman_tool RUNTIME DESTINATION ${CMAKE_INSTALL_BINDIR})
endif()
install(EXPORT leadsman-targets NAMESPACE leadsman:: DESTINATION ${package_dir})

configure_package_config_file(cmake/leadsman-config.cmake.in leadsman-config.cmake
                              INSTALL_DESTINATION ${package_dir})
# Before 1.0 a minor release may change the interface.
write_basic_package_version_file(leadsman-config-version.cmake COMPATIBILITY SameMinorVersion)
install(FILES ${PROJECT_BINARY_DIR}/leadsman-config.cmake
              ${PROJECT_BINARY_DIR}/leadsman-config-version.cmake DESTINATION ${package_dir})

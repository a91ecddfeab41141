# Writes the header that names the build; touches it only when something changed, so that a build
# of an unchanged tree builds nothing.
execute_process(COMMAND git -C "${SOURCE_DIR}" rev-parse --short=12 HEAD
  OUTPUT_VARIABLE hash OUTPUT_STRIP_TRAILING_WHITESPACE ERROR_QUIET RESULT_VARIABLE failed)
if(failed)
  set(hash "unknown")
else()
  execute_process(COMMAND git -C "${SOURCE_DIR}" status --porcelain --untracked-files=no
    OUTPUT_VARIABLE changes ERROR_QUIET)
  if(changes)
    string(APPEND hash "-dirty")
  endif()
endif()
set(text "#pragma once
#define LANEWRIGHT_VERSION \"${VERSION}\"
#define LANEWRIGHT_GIT_HASH \"${hash}\"
#define LANEWRIGHT_BUILD_TYPE \"${BUILD_TYPE}\"
")
set(old "")
if(EXISTS "${OUT}")
  file(READ "${OUT}" old)
endif()
if(NOT old STREQUAL text)
  file(WRITE "${OUT}" "${text}")
endif()

# cmake -DLINKER= -DNM= -DHEADER= -DSTATIC= -DSHARED= -DALLOWED= -DTEMPORARY= -P symbols.cmake
#
# The static library, taken whole, needs nothing from outside itself (but what
# ALLOWED, a regular expression, names), and shows names with its prefix alone.
# The shared library shows the functions of the header, all and nothing else.

# Names that nm lists for a file, the last word of each line.
function(list_names result)
  execute_process(COMMAND ${NM} ${ARGN} OUTPUT_VARIABLE text COMMAND_ERROR_IS_FATAL ANY)
  string(REGEX MATCHALL "[^ \n]+\n" names "${text}")
  string(REPLACE "\n" "" names "${names}")
  set(${result} ${names} PARENT_SCOPE)
endfunction()

execute_process(COMMAND ${LINKER} -r --whole-archive ${STATIC} -o ${TEMPORARY} COMMAND_ERROR_IS_FATAL ANY)
list_names(undefined -u ${TEMPORARY})
# the linker itself provides this one
list(FILTER undefined EXCLUDE REGEX "^_GLOBAL_OFFSET_TABLE_$")
if(ALLOWED)
  list(FILTER undefined EXCLUDE REGEX "${ALLOWED}")
endif()
if(undefined)
  message(FATAL_ERROR "the library needs from outside: ${undefined}")
endif()

list_names(shown -g --defined-only ${TEMPORARY})
list(FILTER shown EXCLUDE REGEX "^pdm_")
if(shown)
  message(FATAL_ERROR "names without the prefix: ${shown}")
endif()

if(SHARED)
  file(READ ${HEADER} text)
  string(REGEX REPLACE "/\\*[^*]*\\*+([^/*][^*]*\\*+)*/" "" text "${text}")
  string(REGEX MATCHALL "pdm_[a-z0-9_]+\\(" declared "${text}")
  string(REPLACE "(" "" declared "${declared}")
  list_names(exported -D --defined-only ${SHARED})
  list(SORT declared)
  list(SORT exported)
  if(NOT declared STREQUAL exported)
    message(FATAL_ERROR "declared: ${declared}\nexported: ${exported}")
  endif()
  list(LENGTH declared count)
  message(STATUS "${count} functions declared and exported")
endif()

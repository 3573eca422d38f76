# cmake -DOUT=report_files.cc -DFILES=name=path;name=path -P embed.cmake
# Writes a C++ source that holds the bytes of each file as duskgrid::publish::files::name.
set(text "// Made by lib/publish/report/embed.cmake.\n#include <string_view>\n\nnamespace duskgrid::publish::files {\n")
foreach(entry IN LISTS FILES)
  string(FIND "${entry}" "=" at)
  string(SUBSTRING "${entry}" 0 ${at} name)
  math(EXPR at "${at} + 1")
  string(SUBSTRING "${entry}" ${at} -1 path)
  file(READ "${path}" hex HEX)
  string(REGEX REPLACE "([0-9a-f][0-9a-f])" "'\\\\x\\1'," bytes "${hex}")
  string(REGEX REPLACE "(('[^,]*',){24})" "\\1\n" bytes "${bytes}")
  string(APPEND text "constexpr char k_${name}[] = {${bytes}'\\0'};\nextern const std::string_view ${name};\nconst std::string_view ${name}(k_${name}, sizeof(k_${name}) - 1);\n")
endforeach()
file(WRITE "${OUT}" "${text}}  // namespace duskgrid::publish::files\n")

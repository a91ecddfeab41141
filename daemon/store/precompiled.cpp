// Compiled only so that its precompiled header exists; see CMakeLists.txt.

std = "lua54"
max_line_length = 100
exclude_files = { "build", ".cache" }
files["tests/test_malformed.lua"] = { max_line_length = 110 }

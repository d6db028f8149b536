module leadline.example/ci/tools/openapi

go 1.26

module leadline.example

go 1.26

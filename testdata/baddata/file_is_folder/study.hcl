# The path names a folder.
study { title = "file is folder" }

input "rows_read" {
  file    = "data"
  columns = {
    g = text
    x = number("d")
    y = number("N")
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  smoothness { rule = gcv }
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}

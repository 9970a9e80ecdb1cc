# The checksum at the end does not fit the text.
study { title = "gzip checksum" }

input "rows_read" {
  file    = "data.csv.gz"
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

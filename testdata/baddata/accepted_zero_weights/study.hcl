# Rows of weight zero take no part and are counted.
study { title = "accepted zero weights" }

input "rows_read" {
  file    = "data.csv"
  columns = {
    g = text
    x = number("d")
    y = number("N")
    w = number
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  weight   = w
  smoothness { rule = gcv }
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}

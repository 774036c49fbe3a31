"""Reading: pictures, fields, pixel size, banner, image quality, folders."""

module platen

go 1.26.8

require (
	github.com/DeRuina/timberjack v1.4.10
	github.com/alecthomas/kong v1.17.0
	github.com/fsnotify/fsnotify v1.10.1
	github.com/gofrs/flock v0.13.2
	github.com/lmittmann/tint v1.2.1
	github.com/pelletier/go-toml/v2 v2.4.3
	github.com/rogpeppe/go-internal v1.16.0
	go.etcd.io/bbolt v1.5.0
	go.uber.org/goleak v1.3.0
	golang.org/x/sys v0.49.0
	golang.org/x/text v0.44.0
	gonum.org/v1/gonum v0.17.0
	pgregory.net/rapid v1.3.0
)

require (
	github.com/klauspost/compress v1.18.7 // indirect
	golang.org/x/tools v0.52.0 // indirect
)

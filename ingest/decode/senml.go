package decode

import (
	"math"

	"throatwatch/ingest"
)

// label is a SenML label, numbered as in CBOR [RFC 8428 table 4].
type label int8

const (
	labelBaseVersion label = iota - 6
	labelBaseSum
	labelBaseValue
	labelBaseUnit
	labelBaseTime
	labelBaseName
)


package store

import (
	"encoding/json"
	"fmt"
	"hash/crc32"

	"go.etcd.io/bbolt"
)

// castagnoli is the polynomial of RFC 3720 (iSCSI), which processors compute.
var castagnoli = crc32.MakeTable(crc32.Castagnoli)

const sumLength = 1 + 8 // a line end and 32 bits in hexadecimal

// sum covers the key too, so that a value under a wrong key is noticed.
func sum(key, text []byte) string {
	return fmt.Sprintf("\n%08x", crc32.Update(crc32.Checksum(key, castagnoli), castagnoli, text))
}

func encode(key []byte, x any) ([]byte, error) {
	text, err := json.Marshal(x)
	if err != nil {
		return nil, err
	}
	return append(text, sum(key, text)...), nil
}

// decode reads a value. An error is damage.
func decode[T any](key, value []byte) (T, error) {
	var x T
	if len(value) < sumLength {
		return x, damagef("the value of %q is cut short", key)
	}
	text, s := value[:len(value)-sumLength], value[len(value)-sumLength:]
	if string(s) != sum(key, text) {
		return x, damagef("the value of %q does not agree with its checksum", key)
	}
	if err := json.Unmarshal(text, &x); err != nil {
		return x, damagef("the value of %q: %v", key, err)
	}
	return x, nil
}

func put(b *bbolt.Bucket, key []byte, x any) error {
	v, err := encode(key, x)
	if err != nil {
		return err
	}
	return b.Put(key, v)
}

// get reads the value of a key that must be there.
func get[T any](b *bbolt.Bucket, key []byte) (T, error) {
	v := b.Get(key)
	if v == nil {
		var none T
		return none, damagef("%q is missing", key)
	}
	return decode[T](key, v)
}

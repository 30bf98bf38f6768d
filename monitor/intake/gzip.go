package intake

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io"
)

// mostRatio is how many times as large as the file what is in it may be: no measurements are as much alike, and a file
// made to fill the memory is.
const mostRatio = 200

// unpacked is what is in a gzip file (RFC 1952), within the bounds of the source; a sentence says why it is not to be had.
func unpacked(content []byte, largest int64) (text []byte, sentence string) {
	most := min(largest, mostRatio*int64(len(content)))
	r, err := gzip.NewReader(bytes.NewReader(content))
	if err != nil {
		return nil, `the file does not begin as gzip does; expected gzip, as "compressed" of the source declares`
	}
	var out bytes.Buffer
	n, err := io.Copy(&out, io.LimitReader(r, most+1))
	switch {
	case n > most:
		return nil, fmt.Sprintf("what is in the file is larger than %d bytes; expected no more than \"largest\" of the source, "+
			"and no more than %d times the size of the file", most, mostRatio)
	case errors.Is(err, io.ErrUnexpectedEOF):
		return nil, fmt.Sprintf("the gzip file breaks off behind %d bytes of text; expected its end: it may not have been written whole", n)
	case err != nil:
		return nil, fmt.Sprintf("the gzip file is damaged behind %d bytes of text (%v)", n, err)
	}
	return out.Bytes(), ""
}

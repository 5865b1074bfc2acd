"""A small reader of flat Parquet files, written from the published format
(apache/parquet-format: README, Encodings.md, parquet.thrift, and the compact
protocol of Thrift) with Python's standard library alone. It reads what a flat
table with required or optional columns of INT64, DOUBLE and BYTE_ARRAY, PLAIN
or dictionary encoding, uncompressed or gzip pages of version 1 or 2 needs, and
fails on everything else."""
import struct
import zlib


class Compact:
    """Thrift's compact protocol, generically: structs become dicts by field id."""

    def __init__(self, data, at=0):
        self.data, self.at = data, at

    def byte(self):
        self.at += 1
        return self.data[self.at - 1]

    def varint(self):
        value = shift = 0
        while True:
            b = self.byte()
            value |= (b & 127) << shift
            shift += 7
            if b < 128:
                return value

    def zigzag(self):
        n = self.varint()
        return (n >> 1) ^ -(n & 1)

    def value(self, kind):
        if kind in (1, 2):
            return kind == 1
        if kind == 3:
            return struct.unpack('<b', bytes([self.byte()]))[0]
        if kind in (4, 5, 6):
            return self.zigzag()
        if kind == 7:
            self.at += 8
            return struct.unpack('<d', self.data[self.at - 8:self.at])[0]
        if kind == 8:
            n = self.varint()
            self.at += n
            assert self.at <= len(self.data)
            return bytes(self.data[self.at - n:self.at])
        if kind in (9, 10):
            head = self.byte()
            n, inner = head >> 4, head & 15
            if n == 15:
                n = self.varint()
            if inner in (1, 2):
                return [self.byte() == 1 for _ in range(n)]
            return [self.value(inner) for _ in range(n)]
        if kind == 12:
            return self.struct()
        raise ValueError('thrift type %d' % kind)

    def struct(self):
        fields, last = {}, 0
        while True:
            head = self.byte()
            if head == 0:
                return fields
            delta, kind = head >> 4, head & 15
            last = last + delta if delta else self.zigzag()
            fields[last] = self.value(kind)


def hybrid(data, width, count):
    """Run-length and bit-packed hybrid."""
    out, c = [], Compact(data)
    while len(out) < count:
        head = c.varint()
        if head & 1:
            size = (head >> 1) * width
            bits = int.from_bytes(c.data[c.at:c.at + size], 'little')
            c.at += size
            out += [(bits >> (k * width)) & ((1 << width) - 1) for k in range((head >> 1) * 8)]
        else:
            size = (width + 7) // 8
            out += [int.from_bytes(c.data[c.at:c.at + size], 'little')] * (head >> 1)
            c.at += size
    return out[:count]


def plain(kind, data, count):
    if kind == 2:
        return list(struct.unpack_from('<%dq' % count, data))
    if kind == 5:
        return list(struct.unpack_from('<%dd' % count, data))
    assert kind == 6, kind
    out, at = [], 0
    for _ in range(count):
        n, = struct.unpack_from('<I', data, at)
        out.append(data[at + 4:at + 4 + n].decode())
        at += 4 + n
    return out


def unpack(codec, data):
    return {0: lambda d: d, 2: lambda d: zlib.decompress(d, 31)}[codec](data)


def read(path):
    """Returns columns {name: list, None for null} in the file's order, and the metadata."""
    data = open(path, 'rb').read()
    assert data[:4] == b'PAR1' and data[-4:] == b'PAR1'
    length, = struct.unpack('<I', data[-8:-4])
    footer = Compact(data[len(data) - 8 - length:len(data) - 8])
    meta = footer.struct()
    assert footer.at == length
    root, leaves = meta[2][0], meta[2][1:]
    assert root[5] == len(leaves)
    columns = {}
    for leaf in leaves:
        assert leaf[3] in (0, 1) and 5 not in leaf, leaf
        columns[leaf[4].decode()] = []
    total = 0
    for group in meta.get(4, []):
        total += group[3]
        for leaf, chunk in zip(leaves, group[1]):
            m = chunk[3]
            name = leaf[4].decode()
            assert [n.decode() for n in m[3]] == [name] and m[1] == leaf[1]
            assert m[5] == group[3]
            at, left, dictionary = m.get(11) or m[9], m[5], None
            if m.get(11) == 0:
                at = m[9]
            while left > 0:
                c = Compact(data, at)
                page = c.struct()
                raw = data[c.at:c.at + page[3]]
                at = c.at + page[3]
                if page[1] == 2:
                    dictionary = plain(m[1], unpack(m[4], raw), page[7][1])
                    continue
                optional = leaf[3] == 1
                if page[1] == 0:
                    head = page[5]
                    count, encoding = head[1], head[2]
                    raw = unpack(m[4], raw)
                    levels = [1] * count
                    if optional:
                        n, = struct.unpack_from('<I', raw)
                        levels = hybrid(raw[4:4 + n], 1, count)
                        raw = raw[4 + n:]
                else:
                    assert page[1] == 3, page
                    head = page[8]
                    count, encoding = head[1], head[4]
                    assert head[6] == 0
                    levels = hybrid(raw[:head[5]], 1, count) if optional else [1] * count
                    assert levels.count(0) == head[2]
                    raw = raw[head[5]:]
                    if head.get(7, True):
                        raw = unpack(m[4], raw)
                known = sum(levels)
                if encoding == 0:
                    values = plain(m[1], raw, known)
                else:
                    assert encoding in (2, 8), encoding
                    values = [dictionary[k] for k in hybrid(raw[1:], raw[0], known)] if known else []
                values = iter(values)
                columns[name] += [next(values) if level else None for level in levels]
                left -= count
            assert left == 0
    assert total == meta[3] and all(len(c) == total for c in columns.values())
    return columns, {kv[1].decode(): kv[2].decode() for kv in meta.get(5, [])}

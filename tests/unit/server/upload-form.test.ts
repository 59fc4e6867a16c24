import { createServer, request, type Server } from 'node:http'
import type { AddressInfo } from 'node:net'
import type { Request } from 'express'
import { afterEach, describe, expect, test } from 'vitest'
import { readUploadForm } from '../../../server/middleware/upload-form.ts'
import { Refusal } from '../../../shared/contract/problems.ts'

let http: Server | undefined
afterEach(() => http?.close())

/** A server that reads one form and answers what it found, or what was refused. */
async function formServer(mostBytes = 100_000): Promise<string> {
  http = createServer((req, res) => {
    void (async () => {
      try {
        const { fields, fileName, file } = await readUploadForm(req as unknown as Request, 'file', mostBytes)
        let bytes = 0
        for await (const piece of file) bytes += piece.length
        res.end(JSON.stringify({ fields, fileName, bytes }))
      } catch (error) {
        if (!(error instanceof Refusal)) throw error
        res.end(JSON.stringify({ refused: error.kind.slug, detail: error.message }))
      }
    })()
  })
  await new Promise<void>((listening) => http!.listen(0, '127.0.0.1', listening))
  return `http://127.0.0.1:${(http.address() as AddressInfo).port}/`
}

async function send(url: string, entries: [string, string | Blob, string?][]): Promise<Record<string, unknown>> {
  const form = new FormData()
  for (const [name, value, fileName] of entries) {
    if (typeof value === 'string') form.append(name, value)
    else form.append(name, value, fileName)
  }
  return (await fetch(url, { method: 'POST', body: form })).json() as Promise<Record<string, unknown>>
}

const file = (bytes = 500): Blob => new Blob([new Uint8Array(bytes).fill(65)])

test('fields come with the file as it arrives, whatever its size within the limit', async () => {
  const url = await formServer()

  expect(
    await send(url, [
      ['arm', 'ü-2'],
      ['file', file(99_999), 'a b.csv'],
    ]),
  ).toEqual({ fields: { arm: 'ü-2' }, fileName: 'a b.csv', bytes: 99_999 })
  expect(await send(url, [['file', file(0), 'empty.csv']])).toMatchObject({ bytes: 0 })
})

test('a path in the file name is cut off', async () => {
  expect(await send(await formServer(), [['file', file(), '../../etc/passwd.csv']])).toMatchObject({ fileName: 'passwd.csv' })
})

describe('a form is refused', () => {
  test.each<[string, [string, string | Blob, string?][], string, RegExp]>([
    ['whose file is too large', [['file', file(100_001), 'a.csv']], 'body-too-large', /0\.1 MB/],
    ['that is announced as far too large', [['file', file(900_000), 'a.csv']], 'body-too-large', /0\.1 MB/],
    ['whose file is in another part', [['csv', file(), 'a.csv']], 'invalid-request', /Name its part "file"/],
    [
      'with two files',
      [
        ['file', file(), 'a.csv'],
        ['file', file(), 'b.csv'],
      ],
      'invalid-request',
      /more than one file/,
    ],
    [
      'with a field twice',
      [
        ['arm', 'a'],
        ['arm', 'b'],
        ['file', file(), 'a.csv'],
      ],
      'invalid-request',
      /"arm" is there twice/,
    ],
    [
      'with a field after the file',
      [
        ['file', file(), 'a.csv'],
        ['arm', 'a'],
      ],
      'invalid-request',
      /comes after the file/,
    ],
    [
      'with a field too long',
      [
        ['arm', 'a'.repeat(20_000)],
        ['file', file(), 'a.csv'],
      ],
      'invalid-request',
      /longer than/,
    ],
    [
      'with too many fields',
      [...Array.from({ length: 30 }, (_, k): [string, string] => [`f${k}`, '']), ['file', file(), 'a.csv']],
      'invalid-request',
      /more than 20/,
    ],
    ['without a file', [['arm', 'a']], 'invalid-request', /no file/],
  ])('%s', async (_, entries, slug, detail) => {
    const answer = await send(await formServer(), entries)

    expect(answer.refused).toBe(slug)
    expect(answer.detail).toMatch(detail)
  })

  test.each([
    ['without a boundary', 'multipart/form-data', '', 'malformed-body'],
    [
      'that ends before its last boundary',
      'multipart/form-data; boundary=b',
      '--b\r\ncontent-disposition: form-data; name="file"; filename="a"\r\n\r\n1,2',
      'upload-incomplete',
    ],
    ['that ends within a header', 'multipart/form-data; boundary=b', '--b\r\ncontent-dispos', 'upload-incomplete'],
    ['of garbage', 'multipart/form-data; boundary=b', 'garbage', 'upload-incomplete'],
  ])('%s', async (_, type, body, slug) => {
    const url = await formServer()

    const answer = (await (await fetch(url, { method: 'POST', headers: { 'content-type': type }, body })).json()) as {
      refused: string
    }

    expect(answer.refused).toBe(slug)
  })
})

test('the sender of a refused form gets to read why, and the connection goes on', async () => {
  const url = await formServer(1_000)
  const connection = await new Promise<string>((resolve, reject) => {
    const req = request(url, {
      method: 'POST',
      headers: { 'content-type': 'multipart/form-data; boundary=b', 'transfer-encoding': 'chunked' },
    })
    req.on('response', (res) => {
      let text = ''
      res.on('data', (piece) => (text += piece)).on('end', () => resolve(text))
    })
    req.on('error', reject)
    req.write('--b\r\ncontent-disposition: form-data; name="file"; filename="a"\r\n\r\n')
    for (let k = 0; k < 200; k++) req.write('x'.repeat(10_000))
    req.end('\r\n--b--\r\n')
  })

  expect(JSON.parse(connection)).toMatchObject({ refused: 'body-too-large' })
})

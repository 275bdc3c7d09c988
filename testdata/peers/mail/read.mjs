// Reads one mail from standard input with an independent MIME parser and writes
// what a mail program would make of it as one line of JSON.
import { createHash } from 'node:crypto'
import { simpleParser } from 'mailparser'

const chunks = []
for await (const c of process.stdin) chunks.push(c)
const m = await simpleParser(Buffer.concat(chunks), { skipImageLinks: true, skipTextToHtml: true, skipHtmlToText: true })
const header = (name) => (m.headers.has(name) ? String(m.headers.get(name)?.text ?? m.headers.get(name)) : '')
process.stdout.write(JSON.stringify({
  subject: m.subject ?? '',
  from: m.from?.text ?? '',
  to: m.to?.text ?? '',
  date: m.date?.toISOString() ?? '',
  id: m.messageId ?? '',
  references: [m.references ?? []].flat(),
  auto: header('auto-submitted'),
  key: header('midwatch-key'),
  headers: m.headerLines.map((h) => h.key),
  text: m.text ?? '',
  html: m.html || '',
  attachments: m.attachments.map((a) => ({
    type: a.contentType, id: a.contentId ?? '', disposition: a.contentDisposition ?? '', related: a.related === true,
    size: a.size, sum: createHash('sha256').update(a.content).digest('hex'),
  })),
}) + '\n')

import type { ReactNode } from 'react'
import { useUrlState } from '../lib/url-state.ts'
import { counted } from '../lib/numbers.ts'
import { Button } from './button.tsx'
import { Icon } from './icon.tsx'

export interface Column<T> {
  id: string
  title: string
  cell: (row: T) => ReactNode
  /** What it sorts by; columns without can't be sorted. null sorts last. */
  by?: (row: T) => number | string | null
  /** Numbers and acts stand right. */
  right?: boolean
  /** Left out on a narrow screen. */
  minor?: boolean
  width?: string
}

interface DataTableProps<T> {
  label: string
  columns: Column<T>[]
  rows: T[]
  rowKey: (row: T) => string
  /** Column and direction without a choice in the address: "at" or "-at". */
  sort?: string
  pageSize?: number
  complete?: boolean
}

/** A list that sorts and pages; both live in the address. On a narrow screen each row becomes a block of named values. */
export function DataTable<T>({
  label,
  columns,
  rows,
  rowKey,
  sort: standard = '',
  pageSize = 25,
  complete = true,
}: DataTableProps<T>) {
  const url = useUrlState()
  const sort = url.get('sort') ?? standard
  const falling = sort.startsWith('-')
  const column = columns.find((each) => each.id === sort.replace(/^-/, ''))
  const sorted = column?.by ? rows.toSorted(comparison(column.by, falling)) : rows
  const pages = Math.max(1, Math.ceil(sorted.length / pageSize))
  const page = Math.min(pages, Math.max(1, Number(url.get('page')) || 1))
  const shown = sorted.slice((page - 1) * pageSize, page * pageSize)
  return (
    <div>
      <table role="table" aria-label={label} className="w-full border-collapse max-md:block">
        <thead role="rowgroup" className="max-md:sr-only">
          <tr role="row" className="border-b border-edge">
            {columns.map((each) => {
              const active = column === each
              return (
                <th
                  role="columnheader"
                  key={each.id}
                  scope="col"
                  style={{ width: each.width }}
                  aria-sort={active ? (falling ? 'descending' : 'ascending') : undefined}
                  className={`py-1.5 pr-4 align-bottom text-12 font-normal text-soft last:pr-0 ${each.right ? 'text-right' : 'text-left'}`}
                >
                  {each.by ? (
                    <button
                      type="button"
                      className={`inline-flex items-center gap-1 align-bottom hover:text-ink ${each.right ? 'flex-row-reverse' : ''} ${active ? 'font-semibold text-ink' : ''}`}
                      onClick={() => url.set({ sort: active && !falling ? `-${each.id}` : each.id, page: undefined })}
                    >
                      {each.title}
                      <Icon name="down" className={`size-3 ${active ? (falling ? '' : 'rotate-180') : 'invisible'}`} />
                    </button>
                  ) : (
                    each.title || <span className="sr-only">Acts</span>
                  )}
                </th>
              )
            })}
          </tr>
        </thead>
        <tbody role="rowgroup" className="max-md:block max-md:border-t max-md:border-edge">
          {shown.map((row) => (
            <tr
              role="row"
              key={rowKey(row)}
              className="border-b border-line hover:bg-surface max-md:flex max-md:flex-col max-md:gap-1 max-md:py-3"
            >
              {columns.map((each, index) => (
                <td
                  role="cell"
                  key={each.id}
                  data-label={each.title}
                  className={`py-2.5 pr-4 align-top last:pr-0 max-md:p-0 max-md:text-left ${
                    index > 0
                      ? 'max-md:grid max-md:grid-cols-[7rem_1fr] max-md:items-baseline max-md:before:text-12 max-md:before:text-soft max-md:before:content-[attr(data-label)]'
                      : 'max-md:block'
                  } ${each.right ? 'text-right' : ''} ${each.minor ? 'max-md:hidden' : ''}`}
                >
                  <div className="min-w-0">{each.cell(row)}</div>
                </td>
              ))}
            </tr>
          ))}
        </tbody>
      </table>
      <div className="mt-3 flex flex-wrap items-center gap-3 text-12 text-soft">
        <span>
          {counted(rows.length, 'entry', 'entries')}
          {!complete && '; these are the newest, narrow them by a filter to reach older ones'}
        </span>
        {pages > 1 && (
          <nav aria-label={`Pages of ${label}`} className="ml-auto flex items-center gap-2">
            <Button
              icon="left"
              blocked={page === 1 ? 'This is the first page.' : undefined}
              onClick={() => url.set({ page: page === 2 ? undefined : String(page - 1) }, { push: true })}
            >
              Back
            </Button>
            <span className="num">
              {page} of {pages}
            </span>
            <Button
              icon="right"
              blocked={page === pages ? 'This is the last page.' : undefined}
              onClick={() => url.set({ page: String(page + 1) }, { push: true })}
            >
              Next
            </Button>
          </nav>
        )}
      </div>
    </div>
  )
}

function comparison<T>(by: (row: T) => number | string | null, falling: boolean) {
  return (a: T, b: T) => {
    const left = by(a)
    const right = by(b)
    if (left === null || right === null) return left === right ? 0 : left === null ? 1 : -1
    const order =
      typeof left === 'number' && typeof right === 'number'
        ? left - right
        : String(left).localeCompare(String(right), undefined, { numeric: true })
    return falling ? -order : order
  }
}

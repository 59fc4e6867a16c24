import { everyItem, type Page } from '../../sdk/index.ts'

export interface Everything<T> {
  items: T[]
  /** False when the list was cut at `most`. */
  complete: boolean
}

/** All pages of a list, newest first, up to `most`; sorting and searching then cover the whole of it, not one page. */
export async function everything<T>(
  page: (cursor: string | undefined) => Promise<Page<T>>,
  most = 2_000,
): Promise<Everything<T>> {
  const items: T[] = []
  for await (const item of everyItem(page)) {
    if (items.length === most) return { items, complete: false }
    items.push(item)
  }
  return { items, complete: true }
}
